"""Charts as documents made in Python: the browser draws them where scripts run, the server where they do not.

Nothing is told by colour alone: lines differ by dash, marks by shape, and the numbers stand in a table beside.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import Any, Literal

import altair as alt

from registry.web.figures import day, decimals, places_for, stamp
from registry.web.history import Corridor, Event, History, Point

Shade = Literal["light", "dark"]
Document = dict[str, Any]


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


def _rows(values: list[dict[str, Any]]) -> alt.InlineData:
    return alt.InlineData(values=values)


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
    return alt.X(field, type="temporal", scale=alt.Scale(type="utc"), axis=axis)


def _value(field: str) -> alt.Y:
    axis = alt.Axis(title=None, tickCount=4)
    return alt.Y(field, type="quantitative", scale=alt.Scale(zero=False, nice=False, padding=8), axis=axis)


def _corridor_layers(history: History, inks: Inks) -> list[alt.Chart]:
    rows = [_corridor_row(corridor) for corridor in history.corridors]
    if not rows:
        return []
    base = alt.Chart(_rows(rows))
    band = base.mark_rect(color=inks.corridor, opacity=1).encode(
        x=_time("from"), x2="to", y=_value("low"), y2="high", tooltip=[alt.Tooltip("said:N", title=" ")]
    )
    middle = base.mark_rule(color=inks.soft, strokeWidth=1).encode(x=_time("from"), x2="to", y=_value("value"))
    return [band, middle]


def _event_layers(history: History, inks: Inks) -> list[alt.Chart]:
    tips = [alt.Tooltip("said:N", title=" "), alt.Tooltip("day:N", title="on")]
    layers: list[alt.Chart] = []
    adopted = [_event_row(event) for event in history.events if event.kind == "adoption"]
    if adopted:
        base = alt.Chart(_rows(adopted))
        number = base.mark_text(color=inks.ink, align="left", baseline="top", dx=4, dy=3, fontSize=12, font=FONT)
        layers.append(base.mark_rule(color=inks.soft, strokeWidth=1).encode(x=_time("at"), tooltip=tips))
        layers.append(number.encode(x=_time("at"), y=alt.value(0), text="label:N"))
    worked = [_event_row(event) for event in history.events if event.kind == "maintenance"]
    if worked:
        base = alt.Chart(_rows(worked))
        line = base.mark_rule(color=inks.ink, strokeWidth=1.5, strokeDash=[2, 3])
        lozenge = base.mark_point(color=inks.ink, shape="diamond", filled=True, opacity=1, size=90, yOffset=-6)
        layers.append(line.encode(x=_time("at"), tooltip=tips))
        layers.append(lozenge.encode(x=_time("at"), y=alt.value(HISTORY_HEIGHT), tooltip=tips))
    return layers


def _estimate_layers(history: History, inks: Inks) -> list[alt.Chart]:
    rows = _point_rows(history)
    if not rows:
        return []
    base = alt.Chart(_rows(rows))
    tips = [
        alt.Tooltip("day:N", title="evaluated"),
        alt.Tooltip("said:N", title=history.title.lower()),
        alt.Tooltip("runs:Q", title="runs"),
    ]
    low, value = _value("low"), _value("value")
    layers = [
        base.mark_area(color=inks.ink, opacity=0.16).encode(x=_time("at"), y=low, y2="high", detail="stretch:N"),
        base.mark_line(color=inks.ink, strokeWidth=1.5).encode(x=_time("at"), y=value, detail="stretch:N"),
        base.mark_point(color=inks.ink, filled=True, opacity=1, size=26).encode(x=_time("at"), y=value, tooltip=tips),
    ]
    # A band needs two points: one that stands alone shows its interval as a whisker.
    sizes = Counter(row["stretch"] for row in rows)
    lone = [row for row in rows if sizes[row["stretch"]] == 1]
    if lone:
        whisker = alt.Chart(_rows(lone)).mark_rule(color=inks.ink, opacity=0.4, strokeWidth=1.5)
        layers.append(whisker.encode(x=_time("at"), y=low, y2="high"))
    return layers


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
    layers = [*_corridor_layers(history, inks), *_event_layers(history, inks), *_estimate_layers(history, inks)]
    told = sum(point.value is not None for point in history.points)
    chart = alt.layer(*layers).properties(
        width=held_width(width),
        height=HISTORY_HEIGHT,
        description=(
            f"{history.title} in {history.unit} over time: {told} evaluations with their 95 % band, "
            f"the tolerance round the calibration in force, adoptions and maintenance."
        ),
    )
    document: Document = chart.to_dict()
    document["config"] = look(inks)
    document["autosize"] = {"type": "fit-x", "contains": "padding"}
    return document
