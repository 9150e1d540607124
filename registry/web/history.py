"""The history of a vehicle's parameters: what evaluations fitted, and the corridor of the calibrations in force."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from itertools import zip_longest
from typing import Literal

from registry.domain.calibration import Calibration, InForce
from registry.domain.evaluation import Evaluation
from registry.domain.maintenance import MAINTENANCE_WORDS, Maintenance
from registry.domain.tolerance import Tolerance
from registry.domain.vehicle import Parameters
from registry.web.figures import DASH, with_uncertainty

Line = Literal["left", "right", "side_ratio", "width"]
LINES: tuple[Line, ...] = ("left", "right", "side_ratio", "width")

LINE_WORDS: dict[Line, str] = {
    "left": "Left tick factor",
    "right": "Right tick factor",
    "side_ratio": "Side ratio",
    "width": "Effective width",
}
LINE_UNITS: dict[Line, str] = {"left": "mm per tick", "right": "mm per tick", "side_ratio": "%", "width": "mm"}


#: A corridor that held for a smaller share of the time shown is no wider than two pixels.
SEEN_SHARE = 0.01


@dataclass(frozen=True)
class Point:
    """What one evaluation says of one line, in the line's unit; ``value`` is None where its runs could not tell.

    ``stretch`` counts the unbroken stretches: points of one stretch may be joined.
    """

    as_of: datetime
    value: float | None
    expanded: float | None
    runs_used: int
    stretch: int


@dataclass(frozen=True)
class Corridor:
    """The tolerance interval round one calibration while it was in force, in the line's unit."""

    from_at: datetime
    to_at: datetime
    number: int
    value: float
    low: float
    high: float


@dataclass(frozen=True)
class Event:
    """Something that happened to the vehicle and may show in its parameters."""

    at: datetime
    kind: Literal["adoption", "maintenance"]
    label: str
    detail: str


@dataclass(frozen=True)
class History:
    """One line of a vehicle's history."""

    line: Line
    points: tuple[Point, ...]
    corridors: tuple[Corridor, ...]
    events: tuple[Event, ...]

    @property
    def title(self) -> str:
        return LINE_WORDS[self.line]

    @property
    def drawable(self) -> bool:
        """Whether there is a value to draw at all: a corridor, or an estimate."""
        return bool(self.corridors) or any(point.value is not None for point in self.points)

    @property
    def lasts(self) -> timedelta:
        """From the first to the last moment that the history shows."""
        moments = [moment for one in self.corridors for moment in (one.from_at, one.to_at)]
        moments += [point.as_of for point in self.points] + [event.at for event in self.events]
        return max(moments) - min(moments) if moments else timedelta(0)

    def extent(self) -> tuple[float, float]:
        """Low and high end of what a chart must show: every estimate, and the corridors that lasted long enough to see.

        Values that held for an hour, such as provisional ones, may lie far off and would press all else into a line.
        """
        long = [one for one in self.corridors if one.to_at - one.from_at >= SEEN_SHARE * self.lasts]
        ends = [end for one in long or self.corridors for end in (one.low, one.high)]
        for point in self.points:
            if point.value is not None and point.expanded is not None:
                ends += [point.value - point.expanded, point.value + point.expanded]
        return min(ends), max(ends)

    @property
    def unit(self) -> str:
        return LINE_UNITS[self.line]


@dataclass(frozen=True)
class VehiclePast:
    """What the record holds of one vehicle, oldest first, as far as its history needs it."""

    evaluations: Sequence[Evaluation]
    in_force: Sequence[InForce]
    calibrations: Sequence[Calibration]
    maintenance: Sequence[Maintenance]
    tolerance: Tolerance
    now: datetime


def in_unit(line: Line, parameters: Parameters) -> float:
    """The value of a line in its unit."""
    if line == "left":
        return parameters.left_m_per_tick * 1000.0
    if line == "right":
        return parameters.right_m_per_tick * 1000.0
    if line == "side_ratio":
        return parameters.side_ratio * 100.0
    return parameters.width_m * 1000.0


def corridor_of(line: Line, parameters: Parameters, tolerance: Tolerance) -> tuple[float, float]:
    """Low and high end of the tolerance interval in the line's unit.

    A tick factor of one side has no tolerance of its own: the tolerance of their mean is laid round it.
    """
    value = in_unit(line, parameters)
    if line == "side_ratio":
        half = (1.0 + parameters.side_ratio) * tolerance.side_ratio * 100.0
    else:
        half = value * (tolerance.width if line == "width" else tolerance.tick_factor)
    return value - half, value + half


def _told(line: Line, evaluation: Evaluation) -> tuple[float, float] | None:
    """Value and expanded uncertainty that an evaluation publishes for a line."""
    result = evaluation.result
    if result.fitted is None or result.fitted_u_relative is None or result.coverage_factor is None:
        return None
    value = in_unit(line, result.fitted)
    left_u, right_u, width_u = result.fitted_u_relative
    if line == "width":
        return (value, result.coverage_factor * width_u * value) if result.width.observed else None
    if line == "side_ratio":
        finding = result.side_ratio
        if not finding.observed or finding.u is None:
            return None
        return value, result.coverage_factor * finding.u * (100.0 + value)
    if not (result.tick_factor.observed and result.side_ratio.observed):
        return None
    return value, result.coverage_factor * (left_u if line == "left" else right_u) * value


def points_of(
    line: Line, evaluations: Sequence[Evaluation], maintenance: Sequence[Maintenance] = ()
) -> tuple[Point, ...]:
    """The evaluations as points, oldest first.

    A stretch ends where the runs cannot tell, where another calibration is judged, and at work after which runs are no
    longer compared with those before.
    """
    ends = [work.done_at for work in maintenance if work.ends_window]
    points: list[Point] = []
    stretch, before = 0, None
    for evaluation in evaluations:
        told = _told(line, evaluation)
        window = (evaluation.result.against, sum(end <= evaluation.as_of for end in ends))
        if told is None or window != before:
            stretch += 1
        before = window
        value, expanded = told if told is not None else (None, None)
        points.append(Point(evaluation.as_of, value, expanded, evaluation.result.runs_used, stretch))
    return tuple(points)


def corridors_of(line: Line, past: VehiclePast) -> tuple[Corridor, ...]:
    """One corridor for each stretch of time on one calibration."""
    by_id = {calibration.calibration_id: calibration for calibration in past.calibrations}
    corridors: list[Corridor] = []
    for entry, following in zip_longest(past.in_force, past.in_force[1:]):
        if entry.calibration_id is None:
            continue
        calibration = by_id[entry.calibration_id]
        low, high = corridor_of(line, calibration.result.parameters, past.tolerance)
        value = in_unit(line, calibration.result.parameters)
        to_at = past.now if following is None else following.in_force_from
        corridors.append(Corridor(entry.in_force_from, to_at, calibration.number, value, low, high))
    return tuple(corridors)


def events_of(past: VehiclePast) -> tuple[Event, ...]:
    """Adoptions and maintenance in the order of time."""
    adoptions = [
        Event(
            entry.in_force_from,
            "adoption",
            "nothing" if entry.number is None else f"no. {entry.number}",
            "nothing in force" if entry.number is None else f"calibration {entry.number} in force",
        )
        for entry in past.in_force
    ]
    works = [
        Event(
            work.done_at,
            "maintenance",
            "work",
            MAINTENANCE_WORDS[work.kind] + (f", {work.side}" if work.side is not None else ""),
        )
        for work in past.maintenance
    ]
    return tuple(sorted(adoptions + works, key=lambda event: event.at))


@dataclass(frozen=True)
class NumberRow:
    """One evaluation in numbers, one text a line."""

    as_of: datetime
    runs_used: int
    texts: tuple[str, ...]


def number_rows(histories: Sequence[History]) -> list[NumberRow]:
    """The points of several histories of one vehicle as rows of a table, newest first."""
    rows = zip(*(history.points for history in histories), strict=True)
    return [NumberRow(points[0].as_of, points[0].runs_used, tuple(map(_written, points))) for points in rows][::-1]


def _written(point: Point) -> str:
    if point.value is None or point.expanded is None:
        return DASH
    return " ± ".join(with_uncertainty(point.value, point.expanded))


def history_of(line: Line, past: VehiclePast) -> History:
    """One line of a vehicle's history."""
    return History(line, points_of(line, past.evaluations, past.maintenance), corridors_of(line, past), events_of(past))
