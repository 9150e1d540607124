from __future__ import annotations

from datetime import UTC, datetime, timedelta, timezone

import pytest

from registry import clock


def test_the_present_is_aware_and_in_utc():
    assert clock.now().utcoffset() == timedelta(0)


def test_identities_are_fresh_letters_and_digits():
    made = {clock.new_id() for _ in range(1000)}
    assert len(made) == 1000
    assert all(one.isalnum() and 20 <= len(one) <= 32 for one in made)


@pytest.mark.parametrize(
    ("text", "at"),
    [
        ("2026-03-01T08:30:00Z", datetime(2026, 3, 1, 8, 30, tzinfo=UTC)),
        ("2026-03-01t08:30:00z", datetime(2026, 3, 1, 8, 30, tzinfo=UTC)),
        ("2026-03-01T10:30:00.25+02:00", datetime(2026, 3, 1, 8, 30, 0, 250000, tzinfo=UTC)),
        ("2026-02-28T23:30:00-09:00", datetime(2026, 3, 1, 8, 30, tzinfo=UTC)),
    ],
)
def test_times_are_read_with_their_zone(text, at):
    assert clock.parse_time(text) == at
    assert clock.parse_time(text).tzinfo is UTC


@pytest.mark.parametrize(
    "text",
    ["2026-03-01T08:30:00", "2026-03-01", "08:30", "2026-13-01T08:30:00Z", "2026-02-30T08:30:00Z", "now", "",
     "0001-01-01T00:00:00+14:00", "2026-03-01T25:00:00Z", "20260301T083000Z"],
)  # fmt: skip
def test_what_is_no_time_with_a_zone_is_refused(text):
    with pytest.raises(ValueError, match="2026-03-01T08:30:00Z"):
        clock.parse_time(text)


def test_times_are_written_in_utc_with_z():
    at = datetime(2026, 3, 1, 10, 30, tzinfo=timezone(timedelta(hours=2)))
    assert clock.utc_text(at) == "2026-03-01T08:30:00Z"
    assert clock.utc_text(at + timedelta(microseconds=5)) == "2026-03-01T08:30:00.000005Z"
    assert clock.parse_time(clock.utc_text(at)) == at
    with pytest.raises(ValueError, match="without a zone"):
        clock.utc_text(at.replace(tzinfo=None))


def test_a_time_is_rounded_down_to_its_second():
    at = datetime(2026, 3, 1, 8, 30, 59, 999999, tzinfo=UTC)
    assert clock.whole_second(at) == datetime(2026, 3, 1, 8, 30, 59, tzinfo=UTC)


@pytest.mark.parametrize(
    ("text", "seconds"),
    [("6h", 21600.0), ("30min", 1800.0), ("30m", 1800.0), ("1d", 86400.0), ("1.5 h", 5400.0), ("90s", 90.0)],
)
def test_durations_have_a_number_and_a_unit(text, seconds):
    assert clock.duration_s(text) == seconds


@pytest.mark.parametrize("text", ["6", "h", "-1h", "0s", "1e3s", "6 hours", ""])
def test_what_is_no_duration_is_refused(text):
    with pytest.raises(ValueError, match="such as 6h"):
        clock.duration_s(text)
