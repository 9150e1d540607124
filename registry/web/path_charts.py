"""The path of a run as charts: the whole drive, and a close look at its end against the closure mark.

Both axes have the same scale, so that shapes and ellipses are true. x is ahead of the start pose, y to its left.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import altair as alt

from registry.web.charts import FONT, INKS, Document, Inks, Rows, Shade, finished, held_width
from registry.web.figures import decimals

HIGHEST = 400
LOWEST = 220
#: More points than a screen can show apart are no truer: 600 on a path of 200 m is one each third of a metre.
MOST_POINTS = 600
#: Room round the plot for axis labels, in pixels.
MARGIN_WIDE = 64
AXIS_WIDE = 46

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
    x = alt.X(
        "x", type="quantitative", scale=x_scale, axis=alt.Axis(title=f"ahead, {unit}", tickCount=6, labelBound=True)
    )
    # An axis of fixed width keeps the plot, and with it the one scale, as wide as it was reckoned.
    left = alt.Axis(
        title=f"left, {unit}",
        titleAngle=0,
        titleAlign="left",
        titleY=-8,
        titleX=0,
        tickCount=5,
        minExtent=AXIS_WIDE,
        maxExtent=AXIS_WIDE,
    )
    return x, alt.Y("y", type="quantitative", scale=y_scale, axis=left)


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


def _mark_rows(mark: Mark | None, per_m: float) -> Rows:
    if mark is None:
        return {}
    rows: Rows = {}
    if mark.ellipse_m:
        rows["ellipse"] = [{"x": x * per_m, "y": y * per_m, "i": i} for i, (x, y) in enumerate(mark.ellipse_m)]
    rows["mark"] = [{"x": mark.x_m * per_m, "y": mark.y_m * per_m}]
    return rows


def _layers(name: str, axes: tuple[alt.X, alt.Y], names: list[str], inks: Inks) -> list[alt.Chart]:
    """What draws the rows of one name, the lowest first."""
    base = alt.Chart(alt.NamedData(name))
    order, by = alt.Order("i", type="quantitative"), alt.Detail("by", type="nominal")
    if name == "paths":
        dash = alt.StrokeDash("by", type="nominal", scale=_dashes(names), legend=_legend("stroke", inks))
        return [base.mark_line(color=inks.ink, strokeWidth=1.6).encode(*axes, order, by, dash)]
    if name == "ellipse":
        line = base.mark_line(color=inks.soft, strokeWidth=1.5, fill=inks.corridor, fillOpacity=0.6)
        return [line.encode(*axes, order)]
    if name == "mark":
        plus = base.mark_point(color=inks.ink, shape=PLUS, size=500, filled=False, strokeWidth=2, opacity=1)
        return [plus.encode(*axes)]
    if name == "start":
        word = base.mark_text(color=inks.soft, dy=14, font=FONT, fontSize=12, text="start")
        return [base.mark_point(color=inks.ink, filled=True, opacity=1, size=60).encode(*axes), word.encode(*axes)]
    shape = alt.Shape("by", type="nominal", scale=_shapes(names), legend=_legend("symbol", inks))
    tips = [alt.Tooltip("by", type="nominal", title="by"), alt.Tooltip("said", type="nominal", title="end")]
    return [base.mark_point(color=inks.ink, fill=inks.ink, opacity=1, size=110).encode(*axes, shape, tooltip=tips)]


@dataclass(frozen=True)
class _Drawing:
    """What a chart of a run is drawn from: rows by layer, the lowest first, on one extent of the floor."""

    rows: Rows
    names: list[str]
    unit: str
    per_m: float
    description: str

    def document(self, shade: Shade, width: int) -> Document:
        """The chart."""
        inks = INKS[shade]
        points = [row for some in self.rows.values() for row in some]
        extent = extent_of([row["x"] / self.per_m for row in points], [row["y"] / self.per_m for row in points], width)
        axes = _axes(extent, self.unit, self.per_m)
        layers = [layer for name in self.rows for layer in _layers(name, axes, self.names, inks)]
        chart = alt.layer(*layers).properties(width=extent.width, height=extent.height, description=self.description)
        return finished(chart, self.rows, inks)


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
    names = [path.name for path in paths]
    rows: Rows = {
        "paths": [
            {"x": path.x_m[i], "y": path.y_m[i], "i": i, "by": path.name}
            for path in paths
            for i in thinned(len(path.x_m))
        ],
        **_mark_rows(mark, 1.0),
        "start": [{"x": 0.0, "y": 0.0}],
    }
    description = f"Path of the run by {' and by '.join(names)}, with the closure mark."
    return _Drawing(rows, names, "m", 1.0, description).document(shade, width)


def end_chart(paths: Sequence[DrawnPath], mark: Mark, shade: Shade, width: int) -> Document:
    """Where each set of parameters says that the run ended, round the closure mark with its 95 % ellipse, in mm.

    The closure mark is the origin; the axes keep the directions of the start pose.
    """
    around = tuple((x - mark.x_m, y - mark.y_m) for x, y in mark.ellipse_m)
    ends = []
    for path in paths:
        x_mm, y_mm = 1000.0 * (path.x_m[-1] - mark.x_m), 1000.0 * (path.y_m[-1] - mark.y_m)
        said = f"{decimals(math.hypot(x_mm, y_mm), 1)} mm from the mark"
        ends.append({"x": x_mm, "y": y_mm, "by": path.name, "said": said})
    rows: Rows = {**_mark_rows(Mark(0.0, 0.0, around), 1000.0), "ends": ends}
    description = "End of the run against the closure mark and its 95 % ellipse."
    return _Drawing(rows, [path.name for path in paths], "mm", 1000.0, description).document(shade, width)
