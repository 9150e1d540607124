"""The calibration that an evaluation proposes: at most one open a vehicle, and never one that rests on nothing."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from registry.domain.calibration import Calibration, CalibrationResult
from registry.procedures.evidence import parameter_array
from registry.services import Services
from registry.storage import calibrations as calibration_store
from registry.storage import journal
from registry.storage import runs as run_store
from registry.storage.engine import Connection

#: A new proposal replaces an open one when it differs by more than its own standard uncertainty, or is this much surer.
_SURER = 0.7
_BY = "schedule"


def settle(
    c: Connection,
    services: Services,
    vehicle_id: str,
    in_force: str | None,
    wanted: CalibrationResult | None,
    *,
    keep: bool,
) -> Calibration | None:
    """Leave one open proposal, or none.

    Parameters
    ----------
    in_force
        The calibration in force, which the proposal is based on.
    wanted
        What the evaluation proposes. An open proposal that says the same stays; another is superseded by it.
    keep
        Without a wanted one, whether the open one stays: while an alert that speaks of it stands in its dead band.

    Returns
    -------
    Calibration or None
        The proposal that is open now.
    """
    standing = calibration_store.open_proposals(c, vehicle_id, "evaluation")
    current = standing[-1] if standing and standing[-1].based_on == in_force and _is_sound(c, standing[-1]) else None
    if current is not None and (keep if wanted is None else _says_the_same(current, wanted)):
        return current
    _supersede(c, services, standing, "a later evaluation says otherwise")
    if wanted is None:
        return None
    now = services.now()
    made = calibration_store.add(c, services.new_id(), vehicle_id, wanted, in_force, now, _BY)
    what = {"calibration_id": made.calibration_id, "number": made.number, "kind": "evaluation"}
    journal.write(c, now, _BY, "calibration proposed", vehicle_id, what)
    return made


def drop(c: Connection, services: Services, vehicle_id: str, why: str) -> None:
    """Supersede the open proposals of evaluations."""
    _supersede(c, services, calibration_store.open_proposals(c, vehicle_id, "evaluation"), why)


def _supersede(c: Connection, services: Services, standing: Sequence[Calibration], why: str) -> None:
    for old in standing:
        calibration_store.add_standing(c, old.calibration_id, "superseded", services.now(), _BY, why)


def _is_sound(c: Connection, calibration: Calibration) -> bool:
    """Whether all the runs behind a calibration are still usable."""
    behind = run_store.by_ids(c, [one.run_id for one in calibration.result.runs])
    return all(run.use == "usable" for run in behind)


def _says_the_same(old: Calibration, new: CalibrationResult) -> bool:
    array = parameter_array(new.parameters)
    moved = np.abs(array / parameter_array(old.result.parameters) - 1.0)
    u_new = np.sqrt(np.diag(np.array(new.covariance_relative)))
    u_old = np.sqrt(np.diag(np.array(old.result.covariance_relative)))
    return bool(np.all(moved <= u_old) and np.all(u_new > _SURER * u_old) and old.result.observed == new.observed)
