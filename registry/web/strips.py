"""The tolerance strip: one watched quantity as a gauge between two jaws.

The jaws stand at the tolerance, the line between them is the calibration in force, the mark is what the recent runs
say, with its 95 % whisker, and the trail below it is what earlier evaluations said, the newest uppermost. The form of
the mark says the state as well as its place does: a disc within, a lozenge where it is uncertain, an arrow-head
pointing outwards beyond (two where it lies beyond the view), and an empty gauge where these runs cannot tell.

Everything here is geometry and words; the template writes them as SVG. Coordinates are those of a 240 by 48 view box.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from registry.domain.consequence import consequence
from registry.domain.evaluation import QuantityFinding
from registry.domain.tolerance import QUANTITY_WORDS, Quantity
from registry.web.figures import decimals, interval, percent

VIEW_WIDTH = 240.0
MIDDLE = VIEW_WIDTH / 2.0
#: One tolerance in view box units: the view reaches half a tolerance beyond either jaw.
REACH = 76.0
EDGE = 9.0
ESTIMATE_Y = 13.0
TRAIL_TOP = 22.0
TRAIL_BOTTOM = 44.0
TRAIL_LENGTH = 12

#: JCGM 106 in our rule: act from 95 %, watch from 50 %.
BEYOND_FROM = 0.95
UNCERTAIN_FROM = 0.5

State = Literal["within", "uncertain", "beyond", "cannot_tell", "not_evaluated"]

STATE_WORDS: dict[State, str] = {
    "within": "within",
    "uncertain": "may be beyond",
    "beyond": "beyond tolerance",
    "cannot_tell": "these runs cannot tell",
    "not_evaluated": "not evaluated yet",
}


@dataclass(frozen=True)
class Strip:
    """One strip, ready to draw: x and y in view box units, words beside it."""

    quantity: Quantity
    label: str
    state: State
    state_words: str
    words: str
    title: str
    trail: tuple[tuple[float, float], ...]
    share_words: str = ""
    estimate_x: float | None = None
    #: Held at the edge: the estimate itself lies beyond the view, and so does its whisker.
    off_scale: bool = False
    whisker: tuple[float, float] | None = None
    cut_low: bool = False
    cut_high: bool = False
    outwards: int = 0

    @property
    def jaws(self) -> tuple[float, float]:
        return (MIDDLE - REACH, MIDDLE + REACH)

    @property
    def trail_points(self) -> str:
        """The trail as the ``points`` of a polyline."""
        return " ".join(f"{x:g},{y:g}" for x, y in self.trail)

    @property
    def mark(self) -> str:
        """The path of the mark for this state, drawn round the estimate; empty where there is none."""
        if self.estimate_x is None:
            return ""
        x, y = self.estimate_x, ESTIMATE_Y
        if self.state == "beyond":
            behind = _arrow_head(x - 10.0 * self.outwards, y, self.outwards) if self.off_scale else ""
            return behind + _arrow_head(x, y, self.outwards)
        if self.state == "uncertain":
            return f"M{x:g} {y - 7:g}L{x + 7:g} {y:g}L{x:g} {y + 7:g}L{x - 7:g} {y:g}Z"
        return f"M{x - 5:g} {y:g}a5 5 0 1 0 10 0a5 5 0 1 0 -10 0Z"


def _arrow_head(x: float, y: float, outwards: int) -> str:
    tip, back = x + 6.5 * outwards, x - 4.5 * outwards
    return f"M{tip:g} {y:g}L{back:g} {y - 7:g}L{back:g} {y + 7:g}Z"


def state_of(finding: QuantityFinding | None) -> State:
    """The state that a finding's probability of being beyond tolerance stands for."""
    if finding is None:
        return "not_evaluated"
    if not finding.observed or finding.deviation is None or finding.probability_beyond is None:
        return "cannot_tell"
    if finding.probability_beyond >= BEYOND_FROM:
        return "beyond"
    return "uncertain" if finding.probability_beyond >= UNCERTAIN_FROM else "within"


def place(deviation: float, tolerance: float) -> tuple[float, bool]:
    """Where a deviation lies on the strip, and whether it had to be held at the edge."""
    x = MIDDLE + REACH * deviation / tolerance
    held = min(max(x, EDGE), VIEW_WIDTH - EDGE)
    return round(held, 2), held != x


def trail_of(deviations: Sequence[float | None], tolerance: float) -> tuple[tuple[float, float], ...]:
    """Earlier deviations as points below the estimate, newest first; what could not be told leaves its place empty."""
    step = (TRAIL_BOTTOM - TRAIL_TOP) / (TRAIL_LENGTH - 1)
    return tuple(
        (place(deviation, tolerance)[0], round(TRAIL_TOP + step * row, 2))
        for row, deviation in enumerate(deviations[:TRAIL_LENGTH])
        if deviation is not None
    )


@dataclass(frozen=True)
class Gauge:
    """What a strip is measured against."""

    quantity: Quantity
    tolerance: float
    width_m: float
    coverage_factor: float


def make_strip(gauge: Gauge, finding: QuantityFinding | None, earlier: Sequence[float | None] = ()) -> Strip:
    """The strip of one quantity.

    Parameters
    ----------
    gauge
        The quantity with its tolerance, the vehicle's width and the coverage factor of a 95 % interval.
    finding
        What the latest evaluation says; None before the first.
    earlier
        Deviations of earlier evaluations against the same calibration, newest first, None where those could not tell.
    """
    state = state_of(finding)
    label = QUANTITY_WORDS[gauge.quantity]
    trail = trail_of(earlier, gauge.tolerance)
    if finding is None or state == "cannot_tell" or finding.deviation is None or finding.u is None:
        words = STATE_WORDS[state]
        return Strip(gauge.quantity, label, state, words, words, f"{label}: {words}", trail)
    expanded = gauge.coverage_factor * finding.u
    estimate_x, off_scale = place(finding.deviation, gauge.tolerance)
    low_x, cut_low = place(finding.deviation - expanded, gauge.tolerance)
    high_x, cut_high = place(finding.deviation + expanded, gauge.tolerance)
    words = consequence(gauge.quantity, finding.deviation, gauge.width_m)
    share_words = f"{decimals(100.0 * abs(finding.deviation) / gauge.tolerance, 0)} % of tolerance"
    title = (
        f"{label}: {STATE_WORDS[state]}; {words}, {share_words}; 95 % interval "
        f"{interval(finding.deviation * 100.0, expanded * 100.0)} %, tolerance ±{percent(gauge.tolerance)}"
    )
    return Strip(
        quantity=gauge.quantity,
        label=label,
        state=state,
        state_words=STATE_WORDS[state],
        words=words,
        share_words=share_words,
        title=title,
        estimate_x=estimate_x,
        off_scale=off_scale,
        whisker=None if off_scale else (low_x, high_x),
        cut_low=cut_low,
        cut_high=cut_high,
        outwards=1 if finding.deviation > 0.0 else -1,
        trail=trail,
    )
