"""Malformed runs are refused by field and sample, with a remedy, and leave nothing behind."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from datetime import timedelta
from typing import Any

import numpy as np
import pytest

from registry.domain.run import ClosureStatement, Conditions
from registry.errors import Invalid, TooLarge
from registry.procedures.intake import RunStatement, check_run, take_run
from registry.storage import runs
from tests.numerics.drives import straight
from tests.procedures.drives_on_record import (
    TECHNICIAN,
    VEHICLE,
    DrivenVehicle,
    sealed,
)
from tests.procedures.hand_ins import (
    everything_of,
    pointers_of,
)

NO_READING = ClosureStatement(None, None, None, None, None, None, None)


def refusal_of(driven: DrivenVehicle, statement: RunStatement) -> Invalid:
    """The refusal of a statement, having seen that the check alone refuses it too and that nothing was stored."""
    with pytest.raises(Invalid) as refused:
        take_run(driven.services, TECHNICIAN, VEHICLE, statement)
    with pytest.raises(Invalid):
        check_run(driven.services, TECHNICIAN, VEHICLE, statement)
    assert everything_of(driven) == ([], 0)
    return refused.value


MALFORMED: dict[str, tuple[Callable[[RunStatement], RunStatement], str, str]] = {
    "no key": (lambda s: replace(s, run_key=""), "/run_key", "1 to 200 characters"),
    "a key too long": (lambda s: replace(s, run_key="k" * 201), "/run_key", "1 to 200 characters"),
    "a control character in the key": (lambda s: replace(s, run_key="a\x07b"), "/run_key", "control"),
    "half a letter in the key": (lambda s: replace(s, run_key="a\ud800"), "/run_key", "characters"),
    "a future time": (
        lambda s: replace(s, started_at=s.started_at + timedelta(days=1)),
        "/started_at",
        "check the clock",
    ),
    "a missing reading": (lambda s: replace(s, left_counts=s.left_counts[:-1]), "/left_counts", "must match"),
    "one sample": (
        lambda s: replace(s, time_s=s.time_s[:1], left_counts=s.left_counts[:1], right_counts=s.right_counts[:1]),
        "/time_s",
        "at least 2 samples",
    ),
    "no samples": (
        lambda s: replace(s, time_s=s.time_s[:0], left_counts=s.left_counts[:0], right_counts=s.right_counts[:0]),
        "/time_s",
        "at least 2 samples",
    ),
    "a time that is no number": (lambda s: with_time(s, 7, math.nan), "/time_s/7", "finite"),
    "a time without end": (lambda s: with_time(s, 9, math.inf), "/time_s/9", "finite"),
    "a time that goes back": (lambda s: with_time(s, 5, 0.05), "/time_s/5", "later than the sample before"),
    "a time that stands": (lambda s: with_time(s, 5, float(s.time_s[4])), "/time_s/5", "later than the sample before"),
    "times in milliseconds": (lambda s: replace(s, time_s=s.time_s * 1e6), "/time_s/last", "give seconds"),
    "times beyond any calendar": (lambda s: replace(s, time_s=s.time_s * 1e300), "/time_s/last", "give seconds"),
    "a negative reading": (lambda s: with_count(s, "left_counts", 3, -1), "/left_counts/3", "32-bit counter"),
    "a reading too large": (lambda s: with_count(s, "right_counts", 4, 1 << 32), "/right_counts/4", "counter_bits"),
    "no closure": (lambda s: replace(s, closure=NO_READING), "/closure", "at least one of"),
    "turns alone": (lambda s: replace(s, closure=replace(NO_READING, turns=3)), "/closure", "at least one of"),
    "no uncertainty of the place": (
        lambda s: closing(s, position_sd_m=None),
        "/closure/position_sd_mm",
        "standard uncertainty",
    ),
    "no uncertainty of the heading": (
        lambda s: closing(s, heading_sd_rad=None),
        "/closure/heading_sd_deg",
        "standard uncertainty",
    ),
    "an uncertainty of zero": (lambda s: closing(s, position_sd_m=0.0), "/closure/position_sd_mm", "above 0"),
    "an uncertainty too small to square": (
        lambda s: closing(s, heading_sd_rad=1e-200),
        "/closure/heading_sd_deg",
        "above 0",
    ),
    "a negative uncertainty": (lambda s: closing(s, heading_sd_rad=-0.1), "/closure/heading_sd_deg", "above 0"),
    "an uncertainty that is no number": (
        lambda s: closing(s, position_sd_m=math.nan),
        "/closure/position_sd_mm",
        "finite",
    ),
    "an uncertainty without end": (lambda s: closing(s, position_sd_m=math.inf), "/closure/position_sd_mm", "finite"),
    "an x that is no number": (lambda s: closing(s, x_m=math.nan), "/closure/x_mm", "finite"),
    "a y without end": (lambda s: closing(s, y_m=-math.inf), "/closure/y_mm", "finite"),
    "an x of another unit": (lambda s: closing(s, x_m=1e200), "/closure/x_mm", "check the unit"),
    "a heading beyond half a turn": (lambda s: closing(s, heading_rad=4.0), "/closure/heading_deg", "turns"),
    "a heading of minus half a turn": (lambda s: closing(s, heading_rad=-math.pi), "/closure/heading_deg", "-180"),
    "a negative distance": (lambda s: closing(s, distance_m=-1.0), "/closure/distance_mm", "negative"),
    "turns beyond counting": (lambda s: closing(s, turns=10**30), "/closure/turns", "whole turns"),
    "a load that is no number": (lambda s: replace(s, conditions=Conditions(load_kg=math.nan)), "/load_kg", "kg"),
    "a negative load": (lambda s: replace(s, conditions=Conditions(load_kg=-1.0)), "/load_kg", "kg"),
}


def with_time(statement: RunStatement, sample: int, time_s: float) -> RunStatement:
    times = statement.time_s.copy()
    times[sample] = time_s
    return replace(statement, time_s=times)


def with_count(statement: RunStatement, side: str, sample: int, reading: int) -> RunStatement:
    counts = getattr(statement, side).copy()
    counts[sample] = reading
    return replace(statement, **{side: counts})


def closing(statement: RunStatement, **fields: Any) -> RunStatement:
    return replace(statement, closure=replace(statement.closure, **fields))


@pytest.mark.parametrize("case", MALFORMED)
def test_a_malformed_run_is_refused_by_field_and_sample_and_leaves_nothing(driven: DrivenVehicle, case: str) -> None:
    spoil, pointer, remedy = MALFORMED[case]
    sound = driven.state([(10.0, 0.0), (4.0, 1.5)])
    refusal = refusal_of(driven, spoil(sound))
    told = [error.pointer for error in refusal.errors if remedy in error.detail]
    assert told == [pointer.replace("last", str(sound.time_s.size - 1))], refusal.errors


def test_every_fault_of_a_run_is_named_at_once(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    spoilt = closing(
        replace(statement, run_key="", started_at=statement.started_at + timedelta(days=2)), position_sd_m=None
    )
    assert pointers_of(refusal_of(driven, spoilt)) == ["/run_key", "/started_at", "/closure/position_sd_mm"]


def test_both_sides_out_of_range_are_both_named(driven: DrivenVehicle) -> None:
    statement = with_count(driven.state(straight(5.0)), "left_counts", 2, -5)
    assert pointers_of(refusal_of(driven, with_count(statement, "right_counts", 6, 1 << 40))) == [
        "/left_counts/2",
        "/right_counts/6",
    ]


def test_more_than_two_million_samples_are_too_many(driven: DrivenVehicle) -> None:
    statement = driven.state(straight(5.0))
    many = np.zeros(2_000_001, dtype=np.int64)
    with pytest.raises(TooLarge, match="2,000,000 samples"):
        take_run(
            driven.services,
            TECHNICIAN,
            VEHICLE,
            replace(statement, time_s=np.arange(2_000_001) / 100.0, left_counts=many, right_counts=many),
        )
    assert everything_of(driven) == ([], 0)


def test_letters_of_every_script_may_stand_in_a_key(driven: DrivenVehicle) -> None:
    # A no-break space and a joined sign are no control characters, whatever "printable" means to a terminal.
    key = "Fahrt\u00a07 – 第二圈 👩\u200d🔧"
    statement = sealed(replace(driven.state(straight(5.0)), run_key=key))
    run, _ = take_run(driven.services, TECHNICIAN, VEHICLE, statement)
    with driven.services.read() as c:
        assert runs.find_by_key(c, VEHICLE, key) == run
