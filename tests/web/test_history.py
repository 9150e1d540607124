"""History and its charts, as data."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from typing import Any

import altair as alt
import jsonschema
import pytest

from registry.domain.calibration import Calibration, CalibrationResult, InForce, Observed
from registry.domain.maintenance import Maintenance
from registry.domain.tolerance import Tolerance
from registry.domain.vehicle import Parameters
from registry.web import drawing
from registry.web.charts import INKS, held_width, history_chart
from registry.web.history import (
    LINES,
    History,
    Line,
    VehiclePast,
    corridor_of,
    events_of,
    history_of,
    number_rows,
    points_of,
)
from tests.web.yard import UNSEEN, VALUES, evaluation

T0 = datetime(2031, 1, 1, tzinfo=UTC)


def calibration(number: int, parameters: Parameters) -> Calibration:
    result = CalibrationResult(
        "entered",
        parameters,
        ((4e-8, 1e-8, 0.0), (1e-8, 4e-8, 0.0), (0.0, 0.0, 2.5e-7)),
        Observed(tick_factor=True, side_ratio=True, width=True),
    )
    return Calibration(f"c{number}", "tub-7", number, result, "superseded", None, None, None, T0, "Tove")


def entry(sequence: int, number: int | None, day: int) -> InForce:
    at = T0 + timedelta(days=day)
    identity = None if number is None else f"c{number}"
    return InForce(sequence, "tub-7", identity, number, at, at, "Abel", "why", entered_late=False)


FIRST, SECOND = calibration(1, VALUES), calibration(2, replace(VALUES, width_m=0.625))
PAST = VehiclePast(
    evaluations=[
        *(evaluation(FIRST, n, T0 + timedelta(days=1 + n), T0) for n in range(8)),
        evaluation(SECOND, 0, T0 + timedelta(days=25), T0),
    ],
    in_force=[entry(1, 1, 0), entry(2, None, 15), entry(3, 2, 20)],
    calibrations=[FIRST, SECOND],
    maintenance=[Maintenance("m1", "tub-7", T0 + timedelta(days=14), "collided", "left", None, True, T0, "Tove")],
    tolerance=Tolerance(),
    now=T0 + timedelta(days=30),
)


def layers_with(document: dict[str, Any], mark: str) -> list[dict[str, Any]]:
    return [layer for layer in document["layer"] if layer["mark"]["type"] == mark]


def rows_of(document: dict[str, Any], layer: dict[str, Any]) -> list[dict[str, Any]]:
    rows: list[dict[str, Any]] = document["datasets"][layer["data"]["name"]]
    return rows


@pytest.mark.parametrize(
    ("line", "low", "high"),
    [
        ("left", 0.348 * 0.995, 0.348 * 1.005),
        ("right", 0.3483 * 0.995, 0.3483 * 1.005),
        ("width", 620 * 0.985, 620 * 1.015),
        ("side_ratio", (0.3483 / 0.348 * 0.9985 - 1) * 100, (0.3483 / 0.348 * 1.0015 - 1) * 100),
    ],
)
def test_the_corridor_is_the_tolerance_round_the_value_in_the_unit_of_the_line(
    line: Line, low: float, high: float
) -> None:
    assert corridor_of(line, VALUES, Tolerance()) == pytest.approx((low, high))


def test_a_corridor_lasts_as_long_as_its_calibration_and_there_is_none_while_nothing_is_in_force() -> None:
    corridors = history_of("width", PAST).corridors
    spans = [(one.number, (one.from_at - T0).days, (one.to_at - T0).days) for one in corridors]
    assert spans == [(1, 0, 15), (2, 20, 30)]


def test_what_the_runs_could_not_tell_is_never_a_point_with_a_value() -> None:
    points = points_of("left", PAST.evaluations)
    assert points[3].value is None
    assert points[2].value is not None


def test_a_side_has_a_value_only_where_tick_factor_and_side_ratio_were_both_told() -> None:
    told = PAST.evaluations[0]
    half = replace(told, result=replace(told.result, side_ratio=UNSEEN))
    assert points_of("left", [half])[0].value is None
    assert points_of("width", [half])[0].value is not None


def test_lines_are_broken_where_the_runs_cannot_tell_and_where_another_calibration_is_judged() -> None:
    stretches = [point.stretch for point in points_of("left", PAST.evaluations) if point.value is not None]
    assert stretches[:3] == [stretches[0]] * 3
    assert stretches[3] != stretches[2]
    assert stretches[-1] != stretches[-2]


def test_lines_are_broken_at_work_after_which_runs_are_no_longer_compared() -> None:
    work = Maintenance("m2", "tub-7", T0 + timedelta(days=2, hours=1), "part_fitted", None, None, True, T0, "Tove")
    broken = [point.stretch for point in points_of("width", PAST.evaluations[:3], [work])]
    assert broken[0] == broken[1] != broken[2]
    whole = [point.stretch for point in points_of("width", PAST.evaluations[:3], [replace(work, ends_window=False)])]
    assert whole[0] == whole[1] == whole[2]


def test_the_band_is_the_coverage_factor_times_u() -> None:
    point = points_of("width", PAST.evaluations)[0]
    assert point.value == pytest.approx(620 * 1.002)
    assert point.expanded == pytest.approx(2.05 * 0.003 * 620 * 1.002)


def test_adoptions_and_maintenance_are_marked_in_the_order_of_time() -> None:
    labels = [(event.kind, event.label, event.detail) for event in events_of(PAST)]
    assert labels == [
        ("adoption", "no. 1", "calibration 1 in force"),
        ("maintenance", "work", "collision, left"),
        ("adoption", "nothing", "nothing in force"),
        ("adoption", "no. 2", "calibration 2 in force"),
    ]


def test_the_table_holds_the_same_numbers_newest_first() -> None:
    rows = number_rows([history_of(line, PAST) for line in LINES])
    assert [row.as_of for row in rows] == [one.as_of for one in reversed(PAST.evaluations)]
    assert rows[0].texts[3] == "626.2 ± 3.9"
    assert rows[5].texts == ("–", "–", "–", "621.2 ± 3.8")


def test_a_chart_holds_corridor_band_estimate_adoptions_and_maintenance() -> None:
    document = history_chart(history_of("width", PAST), "light", 640)
    corridor = rows_of(document, layers_with(document, "rect")[0])
    assert [row["high"] for row in corridor] == pytest.approx([620 * 1.015, 625 * 1.015])
    band = rows_of(document, layers_with(document, "area")[0])
    assert len(band) == 9
    assert band[0]["said"] == "621.2 ± 3.8 mm"
    assert band[0]["low"] < 620 * 1.002 < band[0]["high"]
    assert [row["label"] for row in rows_of(document, layers_with(document, "text")[0])] == [
        "no. 1",
        "nothing",
        "no. 2",
    ]
    dashed = [layer for layer in layers_with(document, "rule") if "strokeDash" in layer["mark"]]
    assert [row["said"] for row in rows_of(document, dashed[0])] == ["collision, left"]


def test_a_value_that_held_for_an_hour_does_not_press_the_chart_into_a_line() -> None:
    ruler = calibration(9, replace(VALUES, width_m=0.3))
    brief = replace(entry(0, 9, 0), in_force_from=T0 - timedelta(hours=1))
    past = replace(PAST, calibrations=[*PAST.calibrations, ruler], in_force=[brief, *PAST.in_force])
    history = history_of("width", past)
    assert [one.number for one in history.corridors] == [9, 1, 2]
    assert history.extent()[0] == pytest.approx(620 * 0.985)
    alone = history_of("width", replace(past, evaluations=[], in_force=[brief], now=T0))
    assert alone.extent() == pytest.approx((300 * 0.985, 300 * 1.015))


def test_numbers_of_calibrations_adopted_close_together_stand_in_rows_of_their_own() -> None:
    close = replace(PAST, in_force=[entry(1, 1, 0), entry(2, 2, 1), entry(3, 1, 20)])
    document = history_chart(history_of("width", close), "light", 640)
    rows = [[row["label"] for row in rows_of(document, layer)] for layer in layers_with(document, "text")]
    assert rows == [["no. 1", "no. 1"], ["no. 2"]]


def test_times_on_a_chart_are_utc() -> None:
    document = history_chart(history_of("width", PAST), "light", 640)
    assert {layer["encoding"]["x"]["scale"]["type"] for layer in document["layer"]} == {"utc"}
    assert all(row["at"].endswith("Z") for row in rows_of(document, layers_with(document, "area")[0]))


def test_a_point_that_stands_alone_has_a_whisker() -> None:
    document = history_chart(history_of("left", PAST), "light", 640)
    whiskers = [
        layer for layer in layers_with(document, "rule") if layer["encoding"].get("y2", {}).get("field") == "high"
    ]
    assert len(rows_of(document, whiskers[0])) == 1


def test_a_layer_without_rows_is_left_out() -> None:
    nothing = replace(PAST, evaluations=[], maintenance=[])
    document = history_chart(history_of("left", nothing), "light", 640)
    assert all(rows_of(document, layer) for layer in document["layer"])
    assert not layers_with(document, "area")


def test_a_history_with_nothing_to_draw_says_so() -> None:
    empty = history_of("left", replace(PAST, evaluations=[], in_force=[]))
    assert not empty.drawable
    with pytest.raises(ValueError, match="nothing to draw"):
        history_chart(empty, "light", 640)


def test_dark_charts_are_drawn_in_the_dark_inks() -> None:
    history: History = history_of("width", PAST)
    light, dark = history_chart(history, "light", 640), history_chart(history, "dark", 640)
    assert light["config"]["background"] == INKS["light"].sheet
    assert dark["config"]["background"] == INKS["dark"].sheet
    assert light["datasets"] == dark["datasets"]


def test_a_chart_takes_the_width_of_its_page_within_reason() -> None:
    assert history_chart(history_of("width", PAST), "light", 333)["width"] == 333
    assert (held_width(1), held_width(10**9)) == (220, 1600)


def test_a_chart_is_plain_json_and_can_be_drawn_as_a_picture() -> None:
    document = history_chart(history_of("width", PAST), "light", 640)
    json.dumps(document, allow_nan=False)
    jsonschema.validate(document, alt.load_schema())
    picture = drawing.picture(document)
    assert picture.startswith("<svg")
    assert "no. 2" in picture


def test_the_drawing_script_is_made_offline_and_names_its_entry() -> None:
    script = drawing.script()
    assert b"window.drawChart" in script.plain
    assert len(script.packed) < 400_000
