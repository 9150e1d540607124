"""The path of a run as charts: the whole drive, and a close look at its end against the closure mark.

Both axes have the same scale, so that shapes and ellipses are true. x is ahead of the start pose, y to its left.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import altair as alt

from registry.web.charts import FONT, INKS, Document, Inks, Shade, held_width, look
from registry.web.figures import decimals

HIGHEST = 400
LOWEST = 220
#: More points than a screen can show apart are no truer: 600 on a path of 200 m is one each third of a metre.
MOST_POINTS = 600
#: Room round the plot for axis labels, in pixels.
MARGIN_WIDE = 56

#: A thin upright cross, as surveyors draw a mark.
PLUS = "M-0.6,0H0.6M0,-0.6V0.6"


@dataclass(frozen=True)
class DrawnPath:
    """One path in the frame of the start pose, in metres, under the name of the parameters it was computed by."""

    name: str
    x_m: Sequence[float]
    y_m: Sequence[float]


@dataclass(frozen=True)
class Mark:
    """The closure mark as read, with the outline of its 95 % ellipse (metres); the outline may be empty."""

    x_m: float
    y_m: float
    ellipse_m: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True)
class Extent:
    """A rectangle of the floor (metres) and the pixels that show it to one scale."""

    low_x: float
    high_x: float
    low_y: float
    high_y: float
    width: int
    height: int


def thinned(count: int) -> list[int]:
    """Evenly spread indices of at most ``MOST_POINTS`` samples, always with the first and the last."""
    if count <= MOST_POINTS:
        return list(range(count))
    return [round(i * (count - 1) / (MOST_POINTS - 1)) for i in range(MOST_POINTS)]


def extent_of(xs: Sequence[float], ys: Sequence[float], width: int) -> Extent:
    """The rectangle that holds all points with a margin, at one scale for both axes in ``width`` pixels."""
    plot_width = held_width(width) - MARGIN_WIDE
    span_x, span_y = max(xs) - min(xs), max(ys) - min(ys)
    pad = 0.06 * max(span_x, span_y, 1e-3)
    span_x, span_y = span_x + 2 * pad, span_y + 2 * pad
    scale = plot_width / span_x
    height = min(max(span_y * scale, LOWEST), HIGHEST)
    scale = min(plot_width / span_x, height / span_y)
    middle_x, middle_y = 0.5 * (max(xs) + min(xs)), 0.5 * (max(ys) + min(ys))
    half_x, half_y = 0.5 * plot_width / scale, 0.5 * height / scale
    return Extent(middle_x - half_x, middle_x + half_x, middle_y - half_y, middle_y + half_y, plot_width, round(height))


def _axes(extent: Extent, unit: str, per_m: float) -> tuple[alt.X, alt.Y]:
    x_scale = alt.Scale(domain=[extent.low_x * per_m, extent.high_x * per_m], nice=False, zero=False)
    y_scale = alt.Scale(domain=[extent.low_y * per_m, extent.high_y * per_m], nice=False, zero=False)
    x = alt.X("x:Q", scale=x_scale, axis=alt.Axis(title=f"ahead, {unit}", tickCount=6))
    left = alt.Axis(title=f"left, {unit}", titleAngle=0, titleAlign="left", titleY=-8, titleX=0, tickCount=5)
    return x, alt.Y("y:Q", scale=y_scale, axis=left)


def _dashes(names: list[str]) -> alt.Scale:
    """The newest path is drawn whole, the ones before it in ever shorter dashes."""
    patterns = [[1, 0], [7, 4], [2, 3], [8, 3, 2, 3]]
    return alt.Scale(domain=names, range=[patterns[min(i, 3)] for i in range(len(names) - 1, -1, -1)])


def _shapes(names: list[str]) -> alt.Scale:
    forms = ["circle", "square", "triangle-up", "diamond"]
    return alt.Scale(domain=names, range=[forms[min(i, 3)] for i in range(len(names) - 1, -1, -1)])


def _legend(kind: Literal["stroke", "symbol"], inks: Inks) -> alt.Legend:
    if kind == "stroke":
        return alt.Legend(
            orient="top", direction="vertical", symbolType="stroke", symbolSize=900, symbolStrokeColor=inks.ink
        )
    return alt.Legend(orient="top", direction="vertical", symbolFillColor=inks.ink, symbolStrokeColor=inks.ink)


def _mark_layers(mark: Mark | None, axes: tuple[alt.X, alt.Y], inks: Inks, per_m: float) -> list[alt.Chart]:
    if mark is None:
        return []
    x, y = axes
    layers = []
    outline = [{"x": px * per_m, "y": py * per_m, "i": i} for i, (px, py) in enumerate(mark.ellipse_m)]
    if outline:
        ellipse = alt.Chart(alt.InlineData(values=outline))
        layers.append(
            ellipse.mark_line(color=inks.soft, strokeWidth=1.5, fill=inks.corridor, fillOpacity=0.6).encode(
                x=x, y=y, order="i:Q"
            )
        )
    cross = alt.Chart(alt.InlineData(values=[{"x": mark.x_m * per_m, "y": mark.y_m * per_m}]))
    layers.append(
        cross.mark_point(color=inks.ink, shape=PLUS, size=500, filled=False, strokeWidth=2, opacity=1).encode(x=x, y=y)
    )
    return layers


def _finished(chart: alt.LayerChart | alt.FacetChart, extent: Extent, inks: Inks, description: str) -> Document:
    document: Document = chart.properties(width=extent.width, height=extent.height, description=description).to_dict()
    document["config"] = look(inks)
    return document


def path_chart(paths: Sequence[DrawnPath], mark: Mark | None, shade: Shade, width: int) -> Document:
    """The whole drive by each set of parameters, with the closure mark.

    Parameters
    ----------
    paths
        Oldest parameters first; the last one is drawn whole.
    mark
        The closure mark, where a position was read.
    shade, width
        Light or dark inks, and the width of the chart in pixels.
    """
    inks = INKS[shade]
    rows: list[dict[str, Any]] = [
        {"x": path.x_m[i], "y": path.y_m[i], "i": i, "by": path.name} for path in paths for i in thinned(len(path.x_m))
    ]
    xs, ys = [row["x"] for row in rows], [row["y"] for row in rows]
    if mark is not None:
        xs, ys = [*xs, mark.x_m], [*ys, mark.y_m]
    extent = extent_of(xs, ys, width)
    axes = _axes(extent, "m", 1.0)
    names = [path.name for path in paths]
    lines = (
        alt.Chart(alt.InlineData(values=rows))
        .mark_line(color=inks.ink, strokeWidth=1.6)
        .encode(
            x=axes[0],
            y=axes[1],
            order="i:Q",
            detail="by:N",
            strokeDash=alt.StrokeDash("by:N", scale=_dashes(names), legend=_legend("stroke", inks)),
        )
    )
    start = alt.Chart(alt.InlineData(values=[{"x": 0.0, "y": 0.0, "said": "start"}]))
    dot = start.mark_point(color=inks.ink, filled=True, opacity=1, size=60).encode(x=axes[0], y=axes[1])
    word = start.mark_text(color=inks.soft, dy=14, font=FONT, fontSize=12, text="start").encode(x=axes[0], y=axes[1])
    chart = alt.layer(lines, *_mark_layers(mark, axes, inks, 1.0), dot, word)
    return _finished(chart, extent, inks, f"Path of the run by {' and by '.join(names)}, with the closure mark.")


def end_chart(paths: Sequence[DrawnPath], mark: Mark, shade: Shade, width: int) -> Document:
    """Where each set of parameters says that the run ended, round the closure mark with its 95 % ellipse, in mm.

    The closure mark is the origin; the axes keep the directions of the start pose.
    """
    inks = INKS[shade]
    names = [path.name for path in paths]
    rows: list[dict[str, Any]] = []
    for path in paths:
        x_m, y_m = path.x_m[-1] - mark.x_m, path.y_m[-1] - mark.y_m
        said = f"{decimals(1000.0 * math.hypot(x_m, y_m), 1)} mm from the mark"
        rows.append({"x": 1000.0 * x_m, "y": 1000.0 * y_m, "by": path.name, "said": said})
    around = [(px - mark.x_m, py - mark.y_m) for px, py in mark.ellipse_m]
    at_origin = Mark(0.0, 0.0, tuple(around))
    xs = [row["x"] / 1000.0 for row in rows] + [0.0] + [px for px, _ in around]
    ys = [row["y"] / 1000.0 for row in rows] + [0.0] + [py for _, py in around]
    extent = extent_of(xs, ys, width)
    axes = _axes(extent, "mm", 1000.0)
    ends = (
        alt.Chart(alt.InlineData(values=rows))
        .mark_point(color=inks.ink, fill=inks.ink, opacity=1, size=110)
        .encode(
            x=axes[0],
            y=axes[1],
            shape=alt.Shape("by:N", scale=_shapes(names), legend=_legend("symbol", inks)),
            tooltip=[alt.Tooltip("by:N", title="by"), alt.Tooltip("said:N", title="end")],
        )
    )
    chart = alt.layer(*_mark_layers(at_origin, axes, inks, 1000.0), ends)
    return _finished(chart, extent, inks, "End of the run against the closure mark and its 95 % ellipse.")
