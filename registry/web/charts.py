"""Charts as documents made in Python: the browser draws them where scripts run, the server where they do not.

Nothing is told by colour alone: lines differ by dash, marks by shape, and the numbers stand in a table beside.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Literal

import altair as alt

from registry.web.figures import day, decimals, places_for, stamp
from registry.web.history import Corridor, Event, History, Point

Shade = Literal["light", "dark"]
Document = dict[str, Any]
Rows = dict[str, list[dict[str, Any]]]


@dataclass(frozen=True)
class Inks:
    """The colours of the pages; the style sheet holds the same ones."""

    sheet: str
    ink: str
    soft: str
    rule: str
    corridor: str
    keel: str


INKS: dict[Shade, Inks] = {
    "light": Inks("#fafbf7", "#1b2420", "#55625a", "#c3cec4", "#dce7dd", "#b0300f"),
    "dark": Inks("#1a211d", "#e4eae3", "#9fada3", "#38453d", "#2a382f", "#ff8c69"),
}

FONT = "system-ui, sans-serif"
HISTORY_HEIGHT = 190
#: Room for the number of a calibration on a chart, in pixels.
LABEL_WIDTH, LABEL_HEIGHT = 56, 15
NARROWEST, WIDEST = 220, 1600


def held_width(width: int) -> int:
    """A drawing width in pixels that a page may ask for."""
    return min(max(width, NARROWEST), WIDEST)


def look(inks: Inks) -> Document:
    """The look of every chart as a configuration."""
    axis = {
        "domain": False,
        "gridColor": inks.rule,
        "gridWidth": 0.5,
        "tickColor": inks.rule,
        "labelColor": inks.soft,
        "titleColor": inks.soft,
        "titleFontWeight": "normal",
        "labelFontSize": 12,
        "titleFontSize": 12,
        "labelFont": FONT,
        "titleFont": FONT,
    }
    legend = {
        "offset": 22,
        "labelColor": inks.ink,
        "labelFont": FONT,
        "labelFontSize": 13,
        "labelLimit": 320,
        "title": None,
    }
    return {
        "background": inks.sheet,
        "font": FONT,
        "view": {"stroke": inks.rule, "strokeWidth": 1},
        "axis": axis,
        "legend": legend,
    }


def finished(chart: alt.LayerChart | alt.FacetChart, rows: Rows, inks: Inks) -> Document:
    """A chart as a plain document with its rows, in the look of ours.

    The layers know their rows by name, so that Altair neither copies nor inspects them; and the document is checked
    against the grammar's schema in the tests, not with every request (60 ms of CPU a history against 270).
    """
    document: Document = chart.to_dict(validate=False)
    document["datasets"] = rows
    document["config"] = look(inks)
    return document


def _point_rows(history: History) -> list[dict[str, Any]]:
    return [_point_row(point, history.unit) for point in history.points if point.value is not None]


def _point_row(point: Point, unit: str) -> dict[str, Any]:
    value, expanded = point.value or 0.0, point.expanded or 0.0
    places = places_for(expanded)
    return {
        "at": stamp(point.as_of),
        "value": value,
        "low": value - expanded,
        "high": value + expanded,
        "stretch": point.stretch,
        "day": day(point.as_of),
        "said": f"{decimals(value, places)} ± {decimals(expanded, places)} {unit}",
        "runs": point.runs_used,
    }


def _corridor_row(corridor: Corridor) -> dict[str, Any]:
    return {
        "from": stamp(corridor.from_at),
        "to": stamp(corridor.to_at),
        "low": corridor.low,
        "high": corridor.high,
        "value": corridor.value,
        "said": f"calibration {corridor.number}, tolerance",
    }


def _event_row(event: Event) -> dict[str, Any]:
    return {"at": stamp(event.at), "label": event.label, "said": event.detail, "day": day(event.at)}


def _time(field: str) -> alt.X:
    axis = alt.Axis(title=None, labelOverlap=True, grid=False, tickCount=6)
    return alt.X(field, type="temporal", scale=alt.Scale(type="utc", nice=False), axis=axis)


def _tip(field: str, title: str) -> alt.Tooltip:
    return alt.Tooltip(field, type="nominal", title=title)


def _height(pixels: int) -> alt.YValue:
    return alt.YValue(pixels)  # type: ignore[no-untyped-call]  # Altair gives this one no types


def _value(field: str, history: History) -> alt.Y:
    low, high = history.extent()
    pad = 0.06 * (high - low)
    scale = alt.Scale(domain=[low - pad, high + pad], zero=False, nice=False)
    return alt.Y(field, type="quantitative", scale=scale, axis=alt.Axis(title=None, tickCount=4))


def _rows_of(history: History, width: int) -> Rows:
    """The rows of a history's layers by name; a layer without rows is left out."""
    estimates = _point_rows(history)
    # A band needs two points: one that stands alone shows its interval as a whisker.
    sizes = Counter(row["stretch"] for row in estimates)
    rows = {
        "corridors": [_corridor_row(corridor) for corridor in history.corridors],
        "adoptions": [_event_row(event) for event in history.events if event.kind == "adoption"],
        "maintenance": [_event_row(event) for event in history.events if event.kind == "maintenance"],
        "estimates": estimates,
        "alone": [row for row in estimates if sizes[row["stretch"]] == 1],
        **{f"numbers {i}": labels for i, labels in enumerate(_label_rows(history, width))},
    }
    return {name: some for name, some in rows.items() if some}


def _label_rows(history: History, width: int) -> list[list[dict[str, Any]]]:
    """The labels of the adoptions in as few rows as keep them from lying over one another."""
    apart = history.lasts * (LABEL_WIDTH / held_width(width))
    rows: list[list[dict[str, Any]]] = []
    taken: list[datetime] = []
    for event in history.events:
        if event.kind != "adoption":
            continue
        row = next((i for i, until in enumerate(taken) if event.at >= until), len(rows))
        if row == len(rows):
            rows.append([])
            taken.append(event.at)
        rows[row].append(_event_row(event))
        taken[row] = event.at + apart
    return rows


def _layers(name: str, history: History, inks: Inks) -> list[alt.Chart]:
    """What draws the rows of one name, the lowest first."""
    base = alt.Chart(alt.NamedData(name))
    said = [_tip("said", " "), _tip("day", "on")]
    at, low, high = _time("at"), _value("low", history), alt.Y2("high")
    if name == "corridors":
        band, middle = (
            base.mark_rect(color=inks.corridor, opacity=1, clip=True),
            base.mark_rule(color=inks.soft, clip=True),
        )
        since, until = _time("from"), alt.X2("to")
        return [
            band.encode(since, until, low, high, tooltip=said[:1]),
            middle.encode(since, until, _value("value", history)),
        ]
    if name == "adoptions":
        return [base.mark_rule(color=inks.soft, strokeWidth=1).encode(at, tooltip=said)]
    if name == "maintenance":
        line = base.mark_rule(color=inks.ink, strokeWidth=1.5, strokeDash=[2, 3])
        lozenge = base.mark_point(color=inks.ink, shape="diamond", filled=True, opacity=1, size=90, yOffset=-6)
        return [line.encode(at, tooltip=said), lozenge.encode(at, _height(HISTORY_HEIGHT), tooltip=said)]
    if name == "alone":
        return [base.mark_rule(color=inks.ink, opacity=0.4, strokeWidth=1.5).encode(at, low, high)]
    if name == "estimates":
        stretch, value = alt.Detail("stretch", type="nominal"), _value("value", history)
        tips = [_tip("day", "evaluated"), _tip("said", history.title.lower()), _tip("runs", "runs")]
        return [
            base.mark_area(color=inks.ink, opacity=0.16).encode(at, low, high, stretch),
            base.mark_line(color=inks.ink, strokeWidth=1.5).encode(at, value, stretch),
            base.mark_point(color=inks.ink, filled=True, opacity=1, size=26).encode(at, value, tooltip=tips),
        ]
    top = LABEL_HEIGHT * int(name.removeprefix("numbers "))
    word = base.mark_text(color=inks.ink, align="left", baseline="top", dx=4, dy=3, fontSize=12, font=FONT)
    return [word.encode(at, _height(top), alt.Text("label", type="nominal"))]


def history_chart(history: History, shade: Shade, width: int) -> Document:
    """One line of a vehicle's history: corridor, 95 % band, estimate, adoptions and maintenance.

    Parameters
    ----------
    history
        The line to draw.
    shade
        Light or dark inks.
    width
        Width of the plot in pixels; held to what a page may ask for.

    Raises
    ------
    ValueError
        The history has nothing to draw; see `History.drawable`.
    """
    if not history.drawable:
        raise ValueError("the history has nothing to draw")
    inks = INKS[shade]
    rows = _rows_of(history, width)
    layers = [layer for name in rows for layer in _layers(name, history, inks)]
    told = sum(point.value is not None for point in history.points)
    chart = alt.layer(*layers).properties(
        width=held_width(width),
        height=HISTORY_HEIGHT,
        description=(
            f"{history.title} in {history.unit} over time: {told} evaluations with their 95 % band, "
            f"the tolerance round the calibration in force, adoptions and maintenance."
        ),
    )
    document = finished(chart, rows, inks)
    document["autosize"] = {"type": "fit-x", "contains": "padding"}
    return document
