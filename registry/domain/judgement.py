"""From numbers to what is said: the finding of an evaluation, its sentence, and the alerts that follow from it."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime, timedelta

from registry.domain.alert import AlertContent
from registry.domain.calibration import Calibration, InForce
from registry.domain.consequence import consequence
from registry.domain.evaluation import EvaluationResult, Finding, QuantityFinding
from registry.domain.maintenance import MAINTENANCE_WORDS, Maintenance
from registry.domain.settling import cannot_tell
from registry.domain.tolerance import QUANTITIES, QUANTITY_WORDS, Quantity, Tolerance
from registry.domain.vehicle import Drive
from registry.numerics.conformity import decide

#: After an adoption a vehicle has this long to load the new set before somebody is sent to it.
LOAD_WITHIN = timedelta(days=3)

#: What to look at, by what the vehicle stands on; None is not known.
_INSPECT: dict[Drive | None, dict[Quantity, str]] = {
    None: {
        "tick_factor": "Look at tyre or track wear, tyre pressure and load on both sides",
        "side_ratio": "Compare the two sides: tyre pressure and wear, or track tension and stretch",
        "width": "Look at track tension or tyre pressure, tread and the floor it turns on",
    },
    "tracks": {
        "tick_factor": "Look at track tension, stretch, tread and load on both sides",
        "side_ratio": "Compare the two sides: track tension, stretch and tread",
        "width": "Look at track tension, tread and the floor it turns on",
    },
    "wheels": {
        "tick_factor": "Look at tyre pressure, tyre wear and load on both sides",
        "side_ratio": "Compare the two sides: tyre pressure and wear",
        "width": "Look at tyre pressure, tyre wear and the floor it turns on",
    },
}
#: More than this many tolerances away, the vehicle should not drive on its present numbers.
_FAR = 2.0


def percent(value: float) -> str:
    """A relative value as signed percent with two decimals; nothing has no sign."""
    figure = round(100.0 * value, 2)
    return "0.00 %" if figure == 0.0 else f"{figure:+.2f} %"


def finding_of(quantities: Sequence[QuantityFinding], *, confirmed: bool) -> Finding:
    """What is beyond or may be, by the observed quantities; else ``within`` when all three are, else ``cannot_tell``.

    ``confirmed`` is whether what is beyond stays likely without any single run: one run alone proves nothing.
    Two quantities within tolerance say nothing of the third: ``within`` would read as all well.
    """
    probabilities = [item.probability_beyond for item in quantities if item.probability_beyond is not None]
    decision = decide(max(probabilities, default=0.0))
    if decision != "within":
        return decision if confirmed else "uncertain"
    return "within" if all(item.observed for item in quantities) else "cannot_tell"


def message_of(quantities: Sequence[QuantityFinding], finding: Finding, runs_used: int, *, confirmed: bool) -> str:
    """What an evaluation found, in one or two sentences."""
    seen = [(name, item) for name, item in zip(QUANTITIES, quantities, strict=True) if item.observed]
    figures = ", ".join(
        f"{QUANTITY_WORDS[name]} {percent(item.deviation)} (u {100.0 * item.u:.2f} %)"
        for name, item in seen
        if item.deviation is not None and item.u is not None
    )
    runs = "1 run" if runs_used == 1 else f"{runs_used} runs"
    opening = {
        "within": f"Within tolerance by {runs}: {figures}.",
        "uncertain": f"Perhaps beyond tolerance by {runs}: {figures}.",
        "beyond": f"Beyond tolerance by {runs}: {figures}.",
        "cannot_tell": f"Nothing beyond tolerance by {runs} as far as they tell: {figures}."
        if figures
        else f"{runs}, and none of the quantities is determined.",
    }[finding]
    alone = "" if confirmed else " It rests on one run alone; a second one must agree."
    missing = cannot_tell((quantities[0].observed, quantities[1].observed, quantities[2].observed))
    return " ".join(part for part in (opening + alone, missing) if part)


def holds_beyond(item: QuantityFinding, *, was_open: bool, confirmed: bool) -> bool | None:
    """Whether a quantity is beyond for an alert: True raises or keeps, False clears, None leaves things as they are.

    The dead band: an open alert is cleared at 20 % and less, and one is raised at 95 % and more.
    """
    probability = item.probability_beyond
    if probability is None:
        return None
    if was_open:
        return decide(probability, "beyond") != "within"
    return True if decide(probability) == "beyond" and confirmed else None


def beyond_tolerance(
    vehicle_name: str,
    quantity: Quantity,
    result: EvaluationResult,
    tolerance: Tolerance,
    against: Calibration,
    proposal: Calibration | None,
    *,
    drive: Drive | None = None,
    work: Maintenance | None = None,
) -> AlertContent:
    """The alert for a quantity that is beyond its tolerance.

    Parameters
    ----------
    drive
        What the vehicle stands on, so that nobody is sent to look at a tyre of a vehicle on tracks.
    work
        Work that ended the window and awaits a new calibration: it explains the deviation, so the advice is to go on
        to the calibration instead of looking for a cause.
    """
    index = QUANTITIES.index(quantity)
    item, limit = result.quantities()[index], tolerance.as_tuple()[index]
    deviation, u = item.deviation or 0.0, item.u or 0.0
    far = abs(deviation) >= _FAR * limit
    decision = (
        f"decide on calibration {proposal.number}, which is proposed"
        if proposal is not None
        else "drive calibration runs and propose a new baseline"
    )
    first = f"{_INSPECT[drive][quantity]}; then" if work is None else f"{_expected_after(work)};"
    return AlertContent(
        kind="beyond_tolerance",
        quantity=quantity,
        message=(
            f"{vehicle_name}: {QUANTITY_WORDS[quantity]} is {percent(deviation)} off what it drives on "
            f"(tolerance {100.0 * limit:g} %)"
        ),
        consequence=f"The vehicle {consequence(quantity, deviation, against.result.parameters.width_m)}.",
        advice=f"{first} {decision}.",
        priority="high" if far else "medium",
        act_within="before it drives" if far else "this shift",
        size=deviation,
        u=u,
        probability_beyond=item.probability_beyond,
    )


def _expected_after(work: Maintenance) -> str:
    return f"Expected after the work of {work.done_at:%Y-%m-%d} ({MAINTENANCE_WORDS[work.kind]})"


def no_evidence(vehicle_name: str, last_at: datetime | None, as_of: datetime, silence_days: float) -> AlertContent:
    """The alert for a vehicle of which nothing was heard since ``last_at``, the end of its last usable run.

    Silence is not health.
    """
    since = "no usable run yet" if last_at is None else f"no usable run since {last_at:%Y-%m-%d}"
    days = "" if last_at is None else f" ({(as_of - last_at).days} days)"
    return AlertContent(
        kind="no_evidence",
        quantity=None,
        message=f"{vehicle_name}: {since}{days}",
        consequence=f"After {silence_days:g} days without a usable run nobody knows whether its parameters still hold.",
        advice="Drive one run between two known marks and read its end; a straight and a counted turn tell most.",
        priority="low",
        act_within="this week",
        onset_at=last_at,
    )


def not_loaded(vehicle_name: str, drives_on: int | None, in_force: InForce) -> AlertContent:
    """The alert for a vehicle that still drives on an earlier set days after an adoption."""
    earlier = "an unknown set" if drives_on is None else f"number {drives_on}"
    return AlertContent(
        kind="not_loaded",
        quantity=None,
        message=(
            f"{vehicle_name}: still drives on {earlier}; "
            f"number {in_force.number} is in force since {in_force.in_force_from:%Y-%m-%d}"
        ),
        consequence="What was put into force has no effect until the vehicle loads it.",
        advice="Start the vehicle again where it has network, or carry the parameters to it.",
        priority="medium",
        act_within="this shift",
    )
