from __future__ import annotations

import json
import math

import altair as alt
import jsonschema
import numpy as np
import pytest

from registry.web import drawing
from registry.web.path_charts import MOST_POINTS, DrawnPath, Mark, end_chart, extent_of, path_chart, thinned
from registry.web.run import ELLIPSE_FACTOR, ellipse

OLD = DrawnPath("in force when driven (number 2)", [0.0, 5.0, 10.02], [0.0, 0.05, 0.16])
NEW = DrawnPath("newest fit (proposed, number 3)", [0.0, 5.0, 9.99], [0.0, 0.01, 0.02])
MARK = Mark(9.988, 0.015, ((9.99, 0.015), (9.988, 0.02), (9.986, 0.015), (9.99, 0.015)))


def test_one_pixel_is_as_long_ahead_as_to_the_side() -> None:
    for xs, ys in (([0.0, 30.0], [0.0, 1.0]), ([0.0, 1.0], [0.0, 30.0]), ([-2.0, 2.0], [0.0, 3.0]), ([0.0], [0.0])):
        extent = extent_of(xs, ys, 700)
        ahead = extent.width / (extent.high_x - extent.low_x)
        aside = extent.height / (extent.high_y - extent.low_y)
        assert ahead == pytest.approx(aside, rel=0.005)  # the height is a whole pixel of at least 220
        assert extent.low_x <= min(xs) <= max(xs) <= extent.high_x
        assert extent.low_y <= min(ys) <= max(ys) <= extent.high_y


def test_a_long_path_is_thinned_and_keeps_both_ends() -> None:
    kept = thinned(12_000)
    assert len(kept) == MOST_POINTS
    assert (kept[0], kept[-1]) == (0, 11_999)
    assert thinned(3) == [0, 1, 2]


def test_paths_differ_by_dash_and_the_newest_is_drawn_whole() -> None:
    document = path_chart([OLD, NEW], MARK, "light", 640)
    scale = document["layer"][0]["encoding"]["strokeDash"]["scale"]
    assert scale["domain"] == [OLD.name, NEW.name]
    assert scale["range"] == [[7, 4], [1, 0]]


def test_a_path_chart_shows_the_mark_even_when_it_lies_off_the_path() -> None:
    document = path_chart([OLD], Mark(-40.0, 12.0), "light", 640)
    low, high = document["layer"][0]["encoding"]["x"]["scale"]["domain"]
    assert low < -40.0 < 10.02 < high


def test_the_end_is_told_in_millimetres_from_the_mark() -> None:
    document = end_chart([OLD, NEW], MARK, "light", 480)
    ends = document["datasets"]["ends"]
    assert [(row["x"], row["y"]) for row in ends] == [
        pytest.approx((32.0, 145.0)),
        pytest.approx((2.0, 5.0)),
    ]
    assert ends[1]["said"] == "5.4 mm from the mark"


def test_charts_of_a_run_are_plain_json_and_can_be_drawn_as_pictures() -> None:
    for document in (path_chart([OLD, NEW], MARK, "dark", 390), end_chart([OLD, NEW], MARK, "light", 390)):
        json.dumps(document, allow_nan=False)
        jsonschema.validate(document, alt.load_schema())
        assert "number 3" in drawing.picture(document)


def test_the_ellipse_holds_95_percent_of_a_normal_position() -> None:
    covariance = np.array([[9e-6, 4e-6], [4e-6, 25e-6]])
    outline = np.array(ellipse(np.array([1.0, 2.0]), covariance)) - [1.0, 2.0]
    distance = np.einsum("ni,ij,nj->n", outline, np.linalg.inv(covariance), outline)
    assert distance == pytest.approx(np.full(len(outline), 5.991464547), rel=1e-6)  # chi-square, 2 degrees, 0.95
    assert math.isclose(ELLIPSE_FACTOR**2, 5.991464547, rel_tol=1e-9)
    assert outline[0] == pytest.approx(outline[-1])
