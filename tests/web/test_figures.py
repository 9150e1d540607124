from __future__ import annotations

from datetime import UTC, datetime, timedelta, timezone

import pytest

from registry.domain.run import Misclosure
from registry.web import figures


@pytest.mark.parametrize(
    ("u", "places"),
    [(0.00034, 5), (0.0996, 2), (0.099, 3), (0.1, 2), (1.0, 1), (9.96, 0), (12.0, 0), (340.0, 0)],
)
def test_an_uncertainty_is_written_with_two_significant_digits(u: float, places: int) -> None:
    assert figures.places_for(u) == places


def test_value_and_uncertainty_are_written_to_the_same_place() -> None:
    assert figures.with_uncertainty(0.3477123, 0.000034) == ("0.347712", "0.000034")
    assert figures.with_uncertainty(620.456, 0.78) == ("620.46", "0.78")


def test_an_interval_is_written_to_the_place_of_its_half_width() -> None:
    assert figures.interval(0.1, 0.25) == "−0.15 to 0.35"


def test_a_value_that_rounds_to_nought_has_no_sign() -> None:
    assert figures.decimals(-0.0004, 2) == "0.00"
    assert figures.decimals(-1234.5, 1) == "−1,234.5"


def test_times_are_written_in_utc_whatever_their_zone() -> None:
    at = datetime(2031, 5, 4, 1, 30, tzinfo=timezone(timedelta(hours=2)))
    assert figures.moment(at) == "2031-05-03 23:30"
    assert figures.day(at) == "2031-05-03"
    assert figures.stamp(at) == "2031-05-03T23:30:00Z"
    assert figures.moment(None) == "–"
    assert figures.moment(datetime(2031, 1, 1, tzinfo=UTC)) == "2031-01-01 00:00"


def test_what_was_not_measured_is_said_so() -> None:
    assert figures.millimetres(None) == "not measured"
    assert figures.degrees(None) == "not measured"
    assert figures.percent(None) == "–"


def test_a_closing_error_is_said_as_the_distance_from_the_mark_where_a_position_was_read() -> None:
    assert figures.closing_words(Misclosure(0.003, -0.004, 0.01, None)) == "5 mm from the mark, 0.57° in heading"
    assert figures.closing_words(Misclosure(None, -0.004, None, 0.02)) == "−4 mm to the left, 20 mm in distance"
    assert figures.closing_words(Misclosure(None, None, None, None)) == "not measured"
    assert figures.closing_words(None) == "not measured"


def test_durations_are_written_in_the_unit_a_person_would_use() -> None:
    assert [figures.span(s) for s in (90, 600, 10_000, 400_000)] == ["90 s", "10 min", "3 h", "5 days"]


def test_who_did_it_is_said_in_words() -> None:
    told = [figures.who(text) for text in ("Tove", "schedule", "schedule:pass", "vehicle:tub-7", "local:console")]
    assert told == ["Tove", "the schedule", "the schedule", "vehicle tub-7", "the console"]


def test_a_message_is_said_without_the_name_that_stands_above_it() -> None:
    assert figures.without_name("Ore tub 7: no usable run", "Ore tub 7") == "No usable run"
    assert figures.without_name("Booted on calibration 2", "Ore tub 7") == "Booted on calibration 2"
