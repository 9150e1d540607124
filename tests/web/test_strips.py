from __future__ import annotations

import pytest

from registry.domain.evaluation import QuantityFinding
from registry.web.strips import EDGE, MIDDLE, REACH, TRAIL_LENGTH, VIEW_WIDTH, Gauge, make_strip, place

TICK_FACTOR = Gauge("tick_factor", 0.005, 0.62, 2.0)
SIDE_RATIO = Gauge("side_ratio", 0.0015, 0.65, 2.0)
UNSEEN = QuantityFinding(None, None, False, None)


def found(deviation: float, u: float, probability: float) -> QuantityFinding:
    return QuantityFinding(deviation, u, True, probability)


def test_no_deviation_stands_in_the_middle_and_one_tolerance_at_the_jaw() -> None:
    assert place(0.0, 0.005) == (MIDDLE, False)
    assert place(0.005, 0.005) == (MIDDLE + REACH, False)
    assert place(-0.005, 0.005) == (MIDDLE - REACH, False)


def test_what_is_far_out_is_held_at_the_edge_and_said_to_be_cut() -> None:
    assert place(1.0, 0.005) == (VIEW_WIDTH - EDGE, True)
    cut = make_strip(TICK_FACTOR, found(0.006, 0.001, 0.9))
    assert (cut.cut_low, cut.cut_high, cut.off_scale) == (False, True, False)
    strip = make_strip(TICK_FACTOR, found(-0.02, 0.0005, 1.0))
    assert strip.estimate_x == EDGE
    assert strip.off_scale
    assert strip.whisker is None
    assert strip.mark.count("Z") == 2
    assert "overshoots" not in strip.words
    assert strip.words == "falls short 200 mm in 10 m"


def test_the_whisker_is_the_95_percent_interval() -> None:
    strip = make_strip(TICK_FACTOR, found(0.001, 0.0005, 0.01))
    assert strip.whisker == pytest.approx((MIDDLE, MIDDLE + REACH * 0.4))
    assert (strip.cut_low, strip.cut_high) == (False, False)


def test_a_strip_says_consequence_and_share_in_words() -> None:
    strip = make_strip(SIDE_RATIO, found(0.0015, 0.0002, 0.5))
    assert strip.words == "pulls left 115 mm in 10 m"
    assert strip.share_words == "100 % of tolerance"
    assert strip.title == (
        "side ratio: may be beyond; pulls left 115 mm in 10 m, 100 % of tolerance; "
        "95 % interval 0.110 to 0.190 %, tolerance ±0.15 %"
    )


@pytest.mark.parametrize(
    ("probability", "state"),
    [(0.0, "within"), (0.49, "within"), (0.5, "uncertain"), (0.94, "uncertain"), (0.95, "beyond"), (1.0, "beyond")],
)
def test_the_state_follows_the_probability_of_being_beyond(probability: float, state: str) -> None:
    assert make_strip(TICK_FACTOR, found(0.003, 0.0005, probability)).state == state


def test_each_state_has_a_mark_of_its_own_form() -> None:
    within = make_strip(TICK_FACTOR, found(0.001, 0.0005, 0.0)).mark
    uncertain = make_strip(TICK_FACTOR, found(0.001, 0.0005, 0.6)).mark
    beyond = make_strip(TICK_FACTOR, found(0.001, 0.0005, 1.0)).mark
    assert "a5" in within
    assert len({within, uncertain, beyond}) == 3


def test_the_arrow_head_points_outwards() -> None:
    right = make_strip(TICK_FACTOR, found(0.006, 0.0005, 1.0))
    left = make_strip(TICK_FACTOR, found(-0.006, 0.0005, 1.0))
    assert right.estimate_x is not None
    assert left.estimate_x is not None
    assert float(right.mark[1:].split()[0]) > right.estimate_x
    assert float(left.mark[1:].split()[0]) < left.estimate_x


def test_a_quantity_that_the_runs_cannot_tell_has_no_mark_and_says_so_but_keeps_its_trail() -> None:
    strip = make_strip(TICK_FACTOR, UNSEEN, (0.001, 0.0005))
    assert strip.state == "cannot_tell"
    assert strip.words == "these runs cannot tell"
    assert strip.mark == ""
    assert strip.whisker is None
    assert len(strip.trail) == 2


def test_a_vehicle_never_evaluated_says_so() -> None:
    assert make_strip(TICK_FACTOR, None).words == "not evaluated yet"


def test_the_trail_runs_from_the_newest_above_to_the_oldest_below_and_leaves_gaps_empty() -> None:
    strip = make_strip(TICK_FACTOR, found(0.0, 0.0005, 0.0), (0.001, None, 0.003))
    xs, ys = [x for x, _ in strip.trail], [y for _, y in strip.trail]
    assert xs == pytest.approx([MIDDLE + REACH * 0.2, MIDDLE + REACH * 0.6])
    assert ys[1] - ys[0] == pytest.approx(2 * 2.0)
    assert strip.trail_points.count(",") == 2


def test_the_trail_has_an_end() -> None:
    assert len(make_strip(TICK_FACTOR, found(0.0, 0.001, 0.0), [0.0] * 50).trail) == TRAIL_LENGTH
