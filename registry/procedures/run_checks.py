"""What a run must be to be taken. Malformed ones are refused here; what is merely unusable is kept, set aside."""

from __future__ import annotations

import hashlib
import math
import unicodedata
from collections.abc import Iterator
from dataclasses import asdict, dataclass, replace
from datetime import datetime, timedelta
from typing import Any

import numpy as np
import orjson

from registry.clock import utc_text
from registry.domain.run import ClosureStatement, Conditions
from registry.errors import FieldError, Invalid, TooLarge
from registry.numerics.arrays import Float, Int

MAX_SAMPLES = 2_000_000
MAX_KEY_LENGTH = 200
#: A clock that runs a little ahead of ours is no reason to lose a run.
AHEAD = timedelta(minutes=5)
#: Nobody drives one run for longer; times in milliseconds look like it.
MAX_DURATION = timedelta(days=31)
#: Bounds far beyond any machine (m, rad, kg), so that no product of two numbers leaves floating point.
_LARGEST, _SMALLEST_SD, _MAX_TURNS = 1e6, 1e-12, 100_000


@dataclass(frozen=True)
class RunStatement:
    """A run as it comes through a door, in SI.

    ``time_s`` (n,), ``left_counts`` and ``right_counts`` (n,) are as logged; ``content_digest`` identifies all of it,
    see `sealed`.
    """

    run_key: str
    started_at: datetime
    time_s: Float
    left_counts: Int
    right_counts: Int
    closure: ClosureStatement
    conditions: Conditions
    content_digest: str


def content_digest(body: dict[str, Any]) -> str:
    """Identity of a body as parsed: the same fields and values, in any order and spacing, give the same digest."""
    return hashlib.sha256(orjson.dumps(body, option=orjson.OPT_SORT_KEYS)).hexdigest()


def sealed(statement: RunStatement) -> RunStatement:
    """The statement with the identity of what it holds: the same run has the same one, through whichever door."""
    ticks = {"time_s": statement.time_s, "left": statement.left_counts, "right": statement.right_counts}
    content = {
        "run_key": statement.run_key,
        "started_at": utc_text(statement.started_at),
        "ticks": {name: hashlib.sha256(values.data).hexdigest() for name, values in ticks.items()},
        "closure": asdict(statement.closure),
        "conditions": asdict(statement.conditions),
    }
    return replace(statement, content_digest=content_digest(content))


def check(statement: RunStatement, now: datetime) -> None:
    """Everything that can be judged without knowing the vehicle.

    Raises
    ------
    Invalid
        With every field that is wrong, and its sample.
    TooLarge
        More samples than a run may have.
    """
    errors: list[FieldError] = []
    if not _is_key(statement.run_key):
        errors.append(FieldError("/run_key", f"must be 1 to {MAX_KEY_LENGTH} characters without control characters"))
    if statement.started_at > now + AHEAD:
        errors.append(FieldError("/started_at", "is more than 5 minutes in the future: check the clock that wrote it"))
    errors.extend(_sample_errors(statement))
    errors.extend(_closure_errors(statement.closure))
    load_kg = statement.conditions.load_kg
    if load_kg is not None and not 0.0 <= load_kg <= _LARGEST:
        errors.append(FieldError("/load_kg", f"must be between 0 and {_LARGEST:g} kg"))
    if errors:
        raise Invalid("the run cannot be taken as it is", tuple(errors))


def check_range(statement: RunStatement, bits: int) -> None:
    """Readings must be in the counter's range: a reading outside was not made by this counter.

    Raises
    ------
    Invalid
        Naming the first sample of each side that is outside.
    """
    errors = []
    for name, readings in (("left_counts", statement.left_counts), ("right_counts", statement.right_counts)):
        outside = (readings < 0) | (readings >= 1 << bits)
        if outside.any():
            sample = int(np.argmax(outside))
            detail = (
                f"{int(readings[sample])} is not a reading of a {bits}-bit counter (0 to {(1 << bits) - 1}): "
                "log readings, not increments, or correct counter_bits of the vehicle"
            )
            errors.append(FieldError(f"/{name}/{sample}", detail))
    if errors:
        raise Invalid("a counter reading is out of range", tuple(errors))


def plain_closure(closure: ClosureStatement) -> ClosureStatement:
    """The closure in Python's own numbers: what a caller computed with arrays must read the same from the record."""
    x_m, y_m, heading_rad, distance_m, position_sd_m, heading_sd_rad = (
        None if value is None else float(value) for value in _measures(closure).values()
    )
    turns = None if closure.turns is None else int(closure.turns)
    return ClosureStatement(x_m, y_m, heading_rad, distance_m, turns, position_sd_m, heading_sd_rad)


def _measures(closure: ClosureStatement) -> dict[str, float | None]:
    """The real-valued fields of a closure by the names they have at the doors."""
    return {
        "x_mm": closure.x_m,
        "y_mm": closure.y_m,
        "heading_deg": closure.heading_rad,
        "distance_mm": closure.distance_m,
        "position_sd_mm": closure.position_sd_m,
        "heading_sd_deg": closure.heading_sd_rad,
    }


def _is_key(key: str) -> bool:
    """Halves of surrogate pairs are refused with the control characters: no text encoding keeps them."""
    return 1 <= len(key) <= MAX_KEY_LENGTH and not any(unicodedata.category(letter) in ("Cc", "Cs") for letter in key)


def _sample_errors(statement: RunStatement) -> Iterator[FieldError]:
    size = statement.time_s.size
    if size > MAX_SAMPLES:
        raise TooLarge(f"a run has at most {MAX_SAMPLES:,} samples, this one has {size:,}: cut the log")
    for name, readings in (("left_counts", statement.left_counts), ("right_counts", statement.right_counts)):
        if readings.size != size:
            yield FieldError(f"/{name}", f"has {readings.size} samples and time_s has {size}: all three must match")
    finite = np.isfinite(statement.time_s)
    if size < 2:
        yield FieldError("/time_s", "a run needs at least 2 samples")
    elif not finite.all():
        yield FieldError(f"/time_s/{int(np.argmin(finite))}", "must be a finite number")
    else:
        yield from _time_errors(statement.time_s)


def _time_errors(time_s: Float) -> Iterator[FieldError]:
    later = time_s[1:] > time_s[:-1]
    if not later.all():
        sample = int(np.argmin(later)) + 1
        yield FieldError(f"/time_s/{sample}", "must be later than the sample before: sort or cut the log")
    elif float(time_s[-1]) - float(time_s[0]) > MAX_DURATION.total_seconds():
        detail = f"is more than {MAX_DURATION.days} days after the first sample: give seconds, and one run a log"
        yield FieldError(f"/time_s/{time_s.size - 1}", detail)


def _closure_errors(closure: ClosureStatement) -> Iterator[FieldError]:
    for name, value in _measures(closure).items():
        if value is not None and not abs(value) <= _LARGEST:
            yield FieldError(
                f"/closure/{name}", "must be a finite number of a size that a run can have: check the unit"
            )
    place = (closure.x_m, closure.y_m, closure.distance_m)
    if all(value is None for value in (*place, closure.heading_rad)):
        yield FieldError("/closure", "measure at least one of x_mm, y_mm, heading_deg, distance_mm")
    for name, sd, needed in (
        ("position_sd_mm", closure.position_sd_m, any(value is not None for value in place)),
        ("heading_sd_deg", closure.heading_sd_rad, closure.heading_rad is not None),
    ):
        if (sd is None and needed) or (sd is not None and not sd > _SMALLEST_SD):
            yield FieldError(f"/closure/{name}", "give the standard uncertainty of the reading, above 0")
    if closure.turns is not None and not abs(closure.turns) <= _MAX_TURNS:
        yield FieldError("/closure/turns", f"must be a count of whole turns, at most {_MAX_TURNS:,} either way")
    if closure.heading_rad is not None and not -math.pi < closure.heading_rad <= math.pi + 1e-12:
        yield FieldError("/closure/heading_deg", "must be above -180 and at most 180; give whole turns in turns")
    if closure.distance_m is not None and closure.distance_m < 0.0:
        yield FieldError("/closure/distance_mm", "must not be negative: it is the straight distance from start to end")
