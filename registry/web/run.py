"""The page of one run: where it went by each set of parameters, how it closed, and what it may be used for."""

from __future__ import annotations

import math

import numpy as np
from flask import Blueprint, Response, abort, flash, jsonify, redirect, render_template, request, url_for
from werkzeug.wrappers import Response as BaseResponse

from registry.numerics.arrays import Float
from registry.procedures import intake
from registry.procedures.paths import RunPaths, run_paths
from registry.storage import calibrations, runs, vehicles
from registry.web.charts import Document
from registry.web.current import actor, services
from registry.web.figures import decimals
from registry.web.forms import ReasonForm
from registry.web.path_charts import DrawnPath, Mark, end_chart, path_chart
from registry.web.vehicle import picture, shade_and_width

#: 95 % of a two-dimensional normal distribution lies within this many standard deviations: sqrt(chi2(0.95; 2)).
ELLIPSE_FACTOR = math.sqrt(-2.0 * math.log(0.05))
ELLIPSE_CORNERS = 73


def doors(pages: Blueprint) -> None:
    """Put the page of a run and what can be done there on the blueprint."""
    path = "/runs/<run_id>"
    pages.add_url_rule(path, "run", _run)
    pages.add_url_rule(f"{path}/set-aside", "set_aside", _set_aside, methods=["POST"])
    pages.add_url_rule(f"{path}/restoration", "restore", _restore, methods=["POST"])
    pages.add_url_rule(f"{path}/drawing/<part>.json", "run_document", _document)
    pages.add_url_rule(f"{path}/drawing/<part>.svg", "run_picture", _picture)


def ellipse(centre_m: Float, covariance_m2: Float) -> tuple[tuple[float, float], ...]:
    """The outline of the 95 % ellipse of a position, closed.

    Parameters
    ----------
    centre_m
        (2,) position in metres.
    covariance_m2
        (2, 2) covariance in square metres.
    """
    variances, axes = np.linalg.eigh(covariance_m2)
    around = np.linspace(0.0, 2.0 * math.pi, ELLIPSE_CORNERS)
    circle = np.stack([np.cos(around), np.sin(around)])
    outline = centre_m[:, None] + ELLIPSE_FACTOR * axes @ (np.sqrt(np.clip(variances, 0.0, None))[:, None] * circle)
    return tuple((float(x), float(y)) for x, y in outline.T)


def drawn_of(paths: RunPaths) -> tuple[list[DrawnPath], Mark | None]:
    """The paths and the mark as charts take them."""
    drawn = [
        DrawnPath(path.label, [float(x) for x in path.poses[:, 0]], [float(y) for y in path.poses[:, 1]])
        for path in paths.paths
    ]
    if paths.mark_m is None:
        return drawn, None
    outline = () if paths.mark_covariance_m2 is None else ellipse(paths.mark_m, paths.mark_covariance_m2)
    return drawn, Mark(float(paths.mark_m[0]), float(paths.mark_m[1]), outline)


def _run(run_id: str) -> str:
    return _page(run_id, None)


def _page(run_id: str, sent: ReasonForm | None) -> str:
    paths = run_paths(services(), run_id)
    with services().read() as c:
        version = vehicles.current(c, paths.run.vehicle_id)
        states = runs.states(c, run_id)
        used_in = [
            one
            for one in calibrations.all_for(c, paths.run.vehicle_id)
            if any(contribution.run_id == run_id for contribution in one.result.runs)
        ]
    conditions = paths.run.conditions
    noted = (
        ("Start mark", conditions.start_mark),
        ("End mark", conditions.end_mark),
        ("Course", conditions.course),
        ("Surface", conditions.surface),
        ("Load", None if conditions.load_kg is None else f"{decimals(conditions.load_kg, 0)} kg"),
        ("Driven by", conditions.driven_by),
        ("Read by", conditions.read_by),
        ("Instrument", conditions.instrument),
        ("Note", conditions.note),
    )
    return render_template(
        "run.html",
        run=paths.run,
        version=version,
        paths=paths.paths,
        mark=paths.mark_m,
        states=states,
        used_in=used_in,
        noted=[(name, text) for name, text in noted if text],
        form=sent or ReasonForm(),
        sent=sent,
    )


def _set_aside(run_id: str) -> BaseResponse | tuple[str, int]:
    form = ReasonForm(request.form)
    done = form.attempt(lambda: intake.set_aside(services(), actor(), run_id, form.reason.data or ""))
    if done is None:
        return _page(run_id, form), 422
    flash("The run is set aside; evaluations and baselines leave it out from now on.")
    return redirect(url_for("web.run", run_id=run_id), 303)


def _restore(run_id: str) -> BaseResponse | tuple[str, int]:
    form = ReasonForm(request.form)
    done = form.attempt(lambda: intake.restore(services(), actor(), run_id, form.reason.data or ""))
    if done is None:
        return _page(run_id, form), 422
    flash("The run is usable again.")
    return redirect(url_for("web.run", run_id=run_id), 303)


def _drawn(run_id: str, part: str) -> Document:
    drawn, mark = drawn_of(run_paths(services(), run_id))
    shade, width = shade_and_width()
    if part == "path":
        return path_chart(drawn, mark, shade, width)
    if part != "end" or mark is None:
        abort(404)
    return end_chart(drawn, mark, shade, width)


def _document(run_id: str, part: str) -> Response:
    return jsonify(_drawn(run_id, part))


def _picture(run_id: str, part: str) -> Response:
    return picture(_drawn(run_id, part))
