"""The page of one calibration: its values with uncertainty, the runs behind it, and the decision on it."""

from __future__ import annotations

from flask import Blueprint, flash, redirect, render_template, request, url_for
from werkzeug.wrappers import Response

from registry.domain.calibration import Calibration
from registry.domain.cautions import ADOPTION_CAUTIONS
from registry.procedures import adoption
from registry.storage import boots, calibrations, runs, vehicles
from registry.web.current import actor, services
from registry.web.decisions import correlations, decision_on
from registry.web.forms import AdoptionForm, WithdrawalForm


def doors(pages: Blueprint) -> None:
    """Put the page of a calibration and the decision on it on the blueprint."""
    path = "/calibrations/<calibration_id>"
    pages.add_url_rule(path, "calibration", _calibration)
    pages.add_url_rule(f"{path}/adoption", "adopt", _adopt, methods=["POST"])
    pages.add_url_rule(f"{path}/withdrawal", "withdraw", _withdraw, methods=["POST"])


def _calibration(calibration_id: str) -> str:
    return _page(calibration_id, None, None)


def _page(calibration_id: str, adopting: AdoptionForm | None, withdrawing: WithdrawalForm | None) -> str:
    with services().read() as c:
        calibration = calibrations.by_id(c, calibration_id)
        version = vehicles.current(c, calibration.vehicle_id)
        known = calibrations.all_for(c, calibration.vehicle_id)
        behind = {run.run_id: run for run in runs.by_ids(c, [one.run_id for one in calibration.result.runs])}
        loaded = boots.loaded_by(c, calibration_id)
    based_on = next((one for one in known if one.calibration_id == calibration.based_on), None)
    return render_template(
        "calibration.html",
        calibration=calibration,
        version=version,
        decision=decision_on(calibration, known, adopting, withdrawing),
        correlations=correlations(calibration.result),
        runs=behind,
        loaded=loaded,
        based_on=based_on,
        sent=adopting or withdrawing,
        adoption_cautions=ADOPTION_CAUTIONS,
    )


def _adopt(calibration_id: str) -> Response | tuple[str, int]:
    form = AdoptionForm(request.form)
    made = form.attempt(
        lambda: adoption.adopt(services(), actor(), calibration_id, form.reason.data or "", form.in_force_from.data)
    )
    if made is None:
        return _page(calibration_id, form, None), 422
    flash(f"Calibration {made.number} is in force. The vehicle drives on it from its next boot.")
    return _to_vehicle(made)


def _withdraw(calibration_id: str) -> Response | tuple[str, int]:
    form = WithdrawalForm(request.form)
    done = form.attempt(
        lambda: adoption.withdraw(
            services(), actor(), calibration_id, form.reason.data or "", form.then.data, form.reinstated_number
        )
    )
    if done is None:
        return _page(calibration_id, None, form), 422
    holds = (
        "Nothing is in force now." if done.in_force is None else f"Calibration {done.in_force.number} is in force now."
    )
    loaded = f" Loaded by: {', '.join(done.loaded_by)}." if done.loaded_by else ""
    flash(f"Calibration {done.calibration.number} is withdrawn. {holds}{loaded}")
    return _to_vehicle(done.calibration)


def _to_vehicle(calibration: Calibration) -> Response:
    return redirect(url_for("web.vehicle", vehicle_id=calibration.vehicle_id), 303)
