"""The page of one vehicle: what to do next, how it stands, its history, and the forms to act on it."""

from __future__ import annotations

from dataclasses import dataclass, field

from flask import Blueprint, Response, abort, flash, jsonify, make_response, redirect, render_template, request, url_for
from werkzeug.wrappers import Response as BaseResponse

from registry.domain.alert import ALERT_KIND_WORDS
from registry.domain.calibration import Calibration
from registry.domain.cautions import ADOPTION_CAUTIONS, DRIVE_CAUTIONS
from registry.domain.maintenance import MAINTENANCE_WORDS
from registry.domain.tolerance import QUANTITY_WORDS
from registry.procedures import baseline, boot, maintenance
from registry.storage import alerts, boots, calibrations, evaluations, runs, vehicles
from registry.storage import maintenance as works
from registry.storage.engine import Connection
from registry.web import drawing
from registry.web.charts import Document, Shade, history_chart
from registry.web.current import actor, services
from registry.web.decisions import decision_on, value_texts
from registry.web.forms import BaselineForm, EnteredForm, MaintenanceForm, NoteForm, Posted
from registry.web.history import LINES, Line, VehiclePast, history_of, number_rows
from registry.web.policy import PICTURE_POLICY
from registry.web.standing import of_vehicle

#: Rows of each list on the page; older ones are a page further.
ROWS = 12
MOST_ROWS = 400


@dataclass
class Forms:
    """The forms of the page: empty, but for the one that came back."""

    baseline: BaselineForm = field(default_factory=BaselineForm)
    entered: EnteredForm = field(default_factory=EnteredForm)
    maintenance: MaintenanceForm = field(default_factory=MaintenanceForm)
    sent: Posted | None = None


def past_of(c: Connection, vehicle_id: str) -> VehiclePast:
    """What the history of a vehicle is drawn from.

    Raises
    ------
    NotFound
        No such vehicle.
    """
    version = vehicles.current(c, vehicle_id)
    return VehiclePast(
        evaluations=evaluations.history(c, vehicle_id)[-MOST_ROWS:],
        in_force=calibrations.in_force_history(c, vehicle_id),
        calibrations=calibrations.all_for(c, vehicle_id),
        maintenance=works.all_for(c, vehicle_id),
        tolerance=version.statement.tolerance,
        now=services().now(),
    )


def never_in_force(calibration: Calibration) -> bool:
    """Whether a calibration was a proposal that a later one replaced: on the record, but nothing ever drove on it."""
    return calibration.standing == "superseded" and calibration.in_force_from is None


def doors(pages: Blueprint) -> None:
    """Put the page of a vehicle and what can be done there on the blueprint."""
    pages.add_url_rule("/vehicles/<vehicle_id>", "vehicle", _vehicle)
    pages.add_url_rule("/vehicles/<vehicle_id>/baseline", "propose_baseline", _propose_baseline, methods=["POST"])
    pages.add_url_rule("/vehicles/<vehicle_id>/entered", "propose_entered", _propose_entered, methods=["POST"])
    pages.add_url_rule(
        "/vehicles/<vehicle_id>/maintenance", "record_maintenance", _record_maintenance, methods=["POST"]
    )
    pages.add_url_rule("/vehicles/<vehicle_id>/parameters.txt", "parameters_file", _parameters_file)
    pages.add_url_rule("/vehicles/<vehicle_id>/history/<line>.json", "history_document", _history_document)
    pages.add_url_rule("/vehicles/<vehicle_id>/history/<line>.svg", "history_picture", _history_picture)


def _vehicle(vehicle_id: str) -> str:
    return _page(vehicle_id, Forms())


def _page(vehicle_id: str, forms: Forms) -> str:
    with services().read() as c:
        version = vehicles.current(c, vehicle_id)
        standing = of_vehicle(c, version, services().now())
        past = past_of(c, vehicle_id)
        run_page = runs.page(c, vehicle_id, ROWS, request.args.get("runs_after"))
        work_page = works.page(c, vehicle_id, ROWS, request.args.get("work_after"))
        boot_page = boots.page(c, vehicle_id, ROWS, request.args.get("boots_after"))
        open_alerts = alerts.open_for(c, vehicle_id)
        latest = evaluations.latest(c, vehicle_id)
    histories = [history_of(line, past) for line in LINES]
    numbers = {one.calibration_id: one.number for one in past.calibrations}
    in_force = next((one for one in past.calibrations if one.standing == "in force"), None)
    proposals = [one for one in past.calibrations if one.standing == "proposed"]
    return render_template(
        "vehicle.html",
        version=version,
        standing=standing,
        latest=latest,
        histories=histories,
        numbers_table=number_rows(histories),
        value_texts=value_texts,
        calibrations=past.calibrations,
        kept=[one for one in reversed(past.calibrations) if not never_in_force(one)],
        replaced=[one for one in reversed(past.calibrations) if never_in_force(one)],
        in_force=in_force,
        decisions=[decision_on(one, past.calibrations) for one in proposals],
        in_force_decision=None if in_force is None else decision_on(in_force, past.calibrations),
        numbers=numbers,
        runs=run_page,
        works=work_page,
        boots=boot_page,
        alerts=open_alerts,
        forms=forms,
        sent=forms.sent,
        note_form=lambda alert_id: NoteForm(key=f"note-{alert_id}"),
        kind_words=ALERT_KIND_WORDS,
        quantity_words=QUANTITY_WORDS,
        work_words=MAINTENANCE_WORDS,
        adoption_cautions=ADOPTION_CAUTIONS,
        drive_cautions=DRIVE_CAUTIONS,
    )


def _propose_baseline(vehicle_id: str) -> BaseResponse | tuple[str, int]:
    form = BaselineForm(request.form)
    made = form.attempt(lambda: baseline.propose_baseline(services(), actor(), vehicle_id, None, form.note.data))
    if made is None:
        return _page(vehicle_id, Forms(baseline=form, sent=form)), 422
    flash(f"Calibration {made.number} is proposed. Look at its numbers, then decide.")
    return redirect(url_for("web.calibration", calibration_id=made.calibration_id), 303)


def _propose_entered(vehicle_id: str) -> BaseResponse | tuple[str, int]:
    form = EnteredForm(request.form)
    made = form.attempt(
        lambda: baseline.propose_entered(
            services(), actor(), vehicle_id, form.kind.data, form.parameters, form.u_m, form.note.data
        )
    )
    if made is None:
        return _page(vehicle_id, Forms(entered=form, sent=form)), 422
    flash(f"Calibration {made.number} is proposed. An approver decides.")
    return redirect(url_for("web.calibration", calibration_id=made.calibration_id), 303)


def _record_maintenance(vehicle_id: str) -> BaseResponse | tuple[str, int]:
    form = MaintenanceForm(request.form)
    made = form.attempt(
        lambda: maintenance.record_maintenance(
            services(), actor(), vehicle_id, form.moment, form.kind.data, form.chosen_side, form.note.data
        )
    )
    if made is None:
        return _page(vehicle_id, Forms(maintenance=form, sent=form)), 422
    what = MAINTENANCE_WORDS[made.kind]
    rest = " Its parameters are questioned until a new calibration." if made.ends_window else ""
    flash(f"Recorded: {what}.{rest}")
    return redirect(url_for("web.vehicle", vehicle_id=vehicle_id, _anchor="maintenance"), 303)


def _parameters_file(vehicle_id: str) -> Response:
    response = make_response(boot.parameters_file(services(), actor(), vehicle_id))
    response.mimetype = "text/plain"
    response.headers["Content-Disposition"] = f'attachment; filename="{vehicle_id}-parameters.txt"'
    return response


def shade_and_width() -> tuple[Shade, int]:
    """How a page asks for a chart: its shade and its width in pixels."""
    shade: Shade = "dark" if request.args.get("shade") == "dark" else "light"
    return shade, request.args.get("width", 640, type=int)


def picture(document: Document) -> Response:
    """A chart as SVG, for pages without scripts."""
    response = make_response(drawing.picture(document))
    response.mimetype = "image/svg+xml"
    response.headers["Content-Security-Policy"] = PICTURE_POLICY
    return response


def _drawn(vehicle_id: str, line: str) -> Document:
    known: Line | None = next((one for one in LINES if one == line), None)
    if known is None:
        abort(404)
    with services().read() as c:
        history = history_of(known, past_of(c, vehicle_id))
    if not history.drawable:
        abort(404)
    return history_chart(history, *shade_and_width())


def _history_document(vehicle_id: str, line: str) -> Response:
    return jsonify(_drawn(vehicle_id, line))


def _history_picture(vehicle_id: str, line: str) -> Response:
    return picture(_drawn(vehicle_id, line))
