"""The kinds of field that bodies and queries are made of, and the only place where door units meet SI.

Doors speak millimetres, degrees and percent; everything behind them metres, radians and fractions.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from datetime import datetime
from typing import Annotated, Any

import numpy as np
from numpy.typing import NDArray
from pydantic import AfterValidator, BeforeValidator, Field, PlainValidator, StringConstraints, WithJsonSchema
from pydantic_core import PydanticCustomError

from registry.api.strict_json import MAX_SAMPLES
from registry.clock import parse_time, utc_text
from registry.errors import TooLarge

#: Digits that a number carries through a door: the boot lines print the same.
DOOR_DIGITS = 12
#: Whole numbers up to here are exact as floating point.
_EXACT = 2**53
#: Thirty thousand years: beyond it a number is no time in seconds.
_LARGEST_TIME_S = 1e12
_INT64_MAX = 2**63 - 1

#: Control characters that no text needs (tab, line feed and carriage return are kept for notes), and halves of pairs.
_UNTEXTUAL = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\x7f\ud800-\udfff]")
_CONTROL = re.compile("[\x00-\x1f\x7f-\x9f\ud800-\udfff]")


def read_time(value: object) -> datetime:
    """
    Read an RFC 3339 time.

    Returns
    -------
    datetime
        Aware, in UTC.

    Raises
    ------
    PydanticCustomError
        No text, no time, or no zone.
    """
    if isinstance(value, datetime):
        return value
    if not isinstance(value, str):
        raise PydanticCustomError("time", "must be a text: a time with a zone, such as 2026-03-01T08:30:00Z")
    try:
        return parse_time(value)
    except ValueError as error:
        hint = " (in a URL a + is written %2B)" if re.search(r":\d\d \d\d:\d\d$", value) else ""
        raise PydanticCustomError("time", "{said}", {"said": f"{error}{hint}"}) from error


def _textual(value: str) -> str:
    if _UNTEXTUAL.search(value):
        raise PydanticCustomError("control", "must not hold control characters")
    return value


def _one_line(value: str) -> str:
    if _CONTROL.search(value):
        raise PydanticCustomError("control", "must be one line without control characters")
    return value


def _said(value: str) -> str:
    if not value.strip():
        raise PydanticCustomError("blank", "must not be blank")
    return value


def _or_none(check: Callable[[str], str]) -> Callable[[str | None], str | None]:
    """An empty optional text is the same as none, as an empty cell of a manifest is."""
    return lambda value: check(value) if value else None


Time = Annotated[datetime, BeforeValidator(read_time)]
Name = Annotated[str, StringConstraints(min_length=1, max_length=200), AfterValidator(_one_line), AfterValidator(_said)]
RunKey = Annotated[str, StringConstraints(min_length=1, max_length=200), AfterValidator(_one_line)]
#: A short optional text; the empty one is the same as none.
Label = Annotated[str | None, Field(max_length=200), AfterValidator(_or_none(_one_line))]
Note = Annotated[str | None, Field(max_length=10_000), AfterValidator(_or_none(_textual))]
Reason = Annotated[
    str, StringConstraints(min_length=1, max_length=10_000), AfterValidator(_said), AfterValidator(_textual)
]
Token = Annotated[str, StringConstraints(min_length=1, max_length=200, pattern=r"^[A-Za-z0-9_-]+$")]
VehicleId = Annotated[str, StringConstraints(min_length=1, max_length=64, pattern=r"^[A-Za-z0-9._-]+$")]
Digest = Annotated[str, StringConstraints(pattern=r"^[0-9a-f]{64}$")]

#: Bounds far beyond any machine, so that no product of two numbers leaves floating point.
MmPerTick = Annotated[float, Field(gt=1e-9, le=1e5)]
PositiveMm = Annotated[float, Field(gt=1e-9, le=1e9)]
Mm = Annotated[float, Field(ge=-1e9, le=1e9)]
Deg = Annotated[float, Field(ge=-1e6, le=1e6)]
PositiveDeg = Annotated[float, Field(gt=1e-9, le=1e6)]
PositivePercent = Annotated[float, Field(gt=1e-9, le=100)]


def _listed(value: object) -> list[Any]:
    if type(value) is not list:
        raise PydanticCustomError("list", "must be a list of numbers")
    if len(value) > MAX_SAMPLES:
        raise TooLarge(f"{len(value):,} samples are more than {MAX_SAMPLES:,}: split the run")
    return value


def _refuse_sample(index: int, message: str) -> PydanticCustomError:
    return PydanticCustomError("sample", "{said}", {"index": index, "said": f"sample {index} {message}"})


def _first_odd_type(values: list[Any]) -> PydanticCustomError:
    index = next(i for i, value in enumerate(values) if type(value) not in (int, float))
    return _refuse_sample(index, "must be a number")


def read_times(value: object) -> NDArray[np.float64]:
    """
    Read sample times in seconds.

    Parameters
    ----------
    value
        A list of JSON numbers, shape (n,).

    Returns
    -------
    ndarray
        Shape (n,), finite.

    Raises
    ------
    PydanticCustomError
        Names the first sample that is no finite number.
    TooLarge
        More samples than the door takes.
    """
    values = _listed(value)
    if not set(map(type, values)) <= {int, float}:
        raise _first_odd_type(values)
    try:
        times_s = np.array(values, dtype=np.float64)
    except OverflowError:
        times_s = np.array(
            [number if abs(number) <= _LARGEST_TIME_S else math.inf for number in values], dtype=np.float64
        )
    outside = ~(np.abs(times_s) <= _LARGEST_TIME_S)
    if outside.any():
        raise _refuse_sample(int(np.argmax(outside)), "must be a finite time in seconds")
    return times_s


def read_counts(value: object) -> NDArray[np.int64]:
    """
    Read counter readings.

    Parameters
    ----------
    value
        A list of JSON numbers without a fraction, shape (n,).

    Returns
    -------
    ndarray
        Shape (n,), exact.

    Raises
    ------
    PydanticCustomError
        Names the first sample that is no whole number or does not fit 63 bits.
    TooLarge
        More samples than the door takes.
    """
    values = _listed(value)
    kinds = set(map(type, values))
    if not kinds <= {int, float}:
        raise _first_odd_type(values)
    if float in kinds:
        values = [_whole(index, number) for index, number in enumerate(values)]
    try:
        return np.array(values, dtype=np.int64)
    except OverflowError:
        index = next(i for i, number in enumerate(values) if abs(number) > _INT64_MAX)
        raise _refuse_sample(index, "is larger than any counter of 63 bits") from None


def _whole(index: int, number: float) -> int:
    if type(number) is int:
        return number
    if not math.isfinite(number) or number != math.floor(number):
        raise _refuse_sample(index, "must be a whole count")
    if abs(number) > _EXACT:
        raise _refuse_sample(index, "is too large to be exact: write it as an integer")
    return int(number)


def _samples_schema(kind: str, what: str) -> WithJsonSchema:
    return WithJsonSchema(
        {"type": "array", "items": {"type": kind}, "maxItems": MAX_SAMPLES, "title": what, "description": what}
    )


Times = Annotated[NDArray[np.float64], PlainValidator(read_times), _samples_schema("number", "Sample times in seconds")]
Counts = Annotated[NDArray[np.int64], PlainValidator(read_counts), _samples_schema("integer", "Counter readings")]


def rounded(value: float) -> float:
    """The number that a door writes: twelve significant digits, and no negative zero."""
    return float(f"{value:.{DOOR_DIGITS}g}") + 0.0


def mm(value_m: float | None) -> float | None:
    """Metres to millimetres, rounded for the door."""
    return None if value_m is None else rounded(value_m * 1e3)


def deg(value_rad: float | None) -> float | None:
    """Radians to degrees, rounded for the door."""
    return None if value_rad is None else rounded(math.degrees(value_rad))


def percent(fraction: float | None) -> float | None:
    """A fraction to percent, rounded for the door."""
    return None if fraction is None else rounded(fraction * 1e2)


def metres(value_mm: float | None) -> float | None:
    """Millimetres to metres."""
    return None if value_mm is None else value_mm / 1e3


def radians(value_deg: float | None) -> float | None:
    """Degrees to radians."""
    return None if value_deg is None else math.radians(value_deg)


def instant(time: datetime | None) -> str | None:
    """RFC 3339 in UTC with Z; a fraction only where there is one."""
    return None if time is None else utc_text(time)
