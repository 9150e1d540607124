"""A pass over the fleet, and a replay of passes over the past."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

from registry.errors import FieldError, Invalid, Refusal
from registry.procedures.evaluation import Holder, LeaseLost, evaluate_vehicle
from registry.services import Services
from registry.storage import alerts as alert_store
from registry.storage import vehicles as vehicle_store
from registry.storage.engine import Connection

#: Told after each vehicle: how many are done, of how many, and which one.
Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class PassOutcome:
    """What a pass did."""

    as_of: datetime
    looked_at: int
    evaluated: int
    findings: dict[str, int]
    alerts_open: int


def run_pass(
    services: Services,
    as_of: datetime | None = None,
    vehicle_ids: Sequence[str] | None = None,
    progress: Progress | None = None,
    holder: Holder | None = None,
) -> PassOutcome:
    """Look at every vehicle (or those named): fit those with something new, ask the others for silence.

    Parameters
    ----------
    as_of
        Judge as of this time with everything known now; default now.
    holder
        The lease that the pass works under, checked with every write.

    Raises
    ------
    Invalid
        ``as_of`` is in the future.
    NotFound
        One of the vehicles named is not on the register; nothing was looked at.
    LeaseLost
        Another process took the pass over.
    ExceptionGroup
        Some vehicles could not be evaluated, after all the others were: one fault must not silence a fleet.
    """
    now = services.now()
    moment = now if as_of is None else as_of
    if moment > now:
        raise Invalid("a pass cannot judge the future", (FieldError("/as_of", "must not be later than now"),))
    with services.read() as c:
        wanted = _wanted(c, vehicle_ids)
    findings: dict[str, int] = {}
    faults: list[Exception] = []
    for number, vehicle_id in enumerate(wanted, start=1):
        try:
            evaluation = evaluate_vehicle(services, vehicle_id, moment, holder=holder)
        except (LeaseLost, Refusal):
            raise
        except Exception as fault:  # noqa: BLE001 - raised below, once the other vehicles have been looked at
            fault.add_note(f"while vehicle {vehicle_id} was looked at as of {moment}")
            faults.append(fault)
            continue
        if evaluation is not None:
            finding = evaluation.result.finding
            findings[finding] = findings.get(finding, 0) + 1
        if progress is not None:
            progress(number, len(wanted), vehicle_id)
    if faults:
        raise ExceptionGroup(f"{len(faults)} of {len(wanted)} vehicles could not be evaluated", faults)
    with services.read() as c:
        alerts_open = len(alert_store.all_open(c))
    return PassOutcome(moment, len(wanted), sum(findings.values()), findings, alerts_open)


def _wanted(c: Connection, vehicle_ids: Sequence[str] | None) -> list[str]:
    """The vehicles of a pass: those named, each once, or all."""
    if vehicle_ids is None:
        return [version.vehicle_id for version in vehicle_store.all_current(c)]
    return [vehicle_store.current(c, vehicle_id).vehicle_id for vehicle_id in dict.fromkeys(vehicle_ids)]


def replay(
    services: Services,
    from_: datetime,
    to: datetime,
    every: timedelta,
    vehicle_ids: Sequence[str] | None = None,
    progress: Progress | None = None,
) -> list[PassOutcome]:
    """Passes at ``from_``, ``from_ + every``, … up to ``to``, each judged as of its time.

    Raises
    ------
    Invalid
        The span is empty, in the future, or the step is not above zero.
    """
    if every <= timedelta(0):
        raise Invalid("the step must be above zero", (FieldError("/every", "give a span such as 1d or 6h"),))
    if to < from_:
        raise Invalid("the span is empty", (FieldError("/to", "must not be before from"),))
    if to > services.now():
        raise Invalid("a pass cannot judge the future", (FieldError("/to", "must not be later than now"),))
    count = (to - from_) // every + 1
    outcomes: list[PassOutcome] = []
    for number in range(count):
        moment = from_ + number * every
        outcomes.append(run_pass(services, moment, vehicle_ids))
        if progress is not None:
            progress(number + 1, count, f"{moment:%Y-%m-%d %H:%M}")
    return outcomes
