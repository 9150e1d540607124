"""The one place that asks for the time or a fresh identity, and how times and durations are written."""

from __future__ import annotations

import re
from datetime import UTC, datetime
from uuid import uuid4

_DURATION = re.compile(r"^\s*(\d+(?:\.\d+)?)\s*(s|min|m|h|d|w)\s*$")
_SECONDS = {"s": 1.0, "m": 60.0, "min": 60.0, "h": 3600.0, "d": 86400.0, "w": 604800.0}
_RFC3339 = re.compile(r"^\d{4}-\d\d-\d\d[Tt ]\d\d:\d\d:\d\d(\.\d+)?([Zz]|[+-]\d\d:\d\d)$")


def now() -> datetime:
    """The present moment, aware, in UTC."""
    return datetime.now(UTC)


def new_id() -> str:
    """A fresh identity: 32 hexadecimal characters."""
    return uuid4().hex


def whole_second(at: datetime) -> datetime:
    """The time rounded down to a whole second, in UTC."""
    return at.astimezone(UTC).replace(microsecond=0)


def utc_text(at: datetime) -> str:
    """An aware time as RFC 3339 in UTC with ``Z``; fractions of a second only where there are some.

    Raises
    ------
    ValueError
        When the time has no zone.
    """
    if at.tzinfo is None:
        raise ValueError("a time without a zone cannot be written")
    text = at.astimezone(UTC).replace(tzinfo=None).isoformat()
    return f"{text}Z"


def parse_time(text: str) -> datetime:
    """An RFC 3339 time with a zone, as an aware time in UTC.

    Raises
    ------
    ValueError
        With a sentence that says what to write instead.
    """
    if not _RFC3339.match(text):
        raise ValueError("must be a time with a zone, such as 2026-03-01T08:30:00Z")
    try:
        return datetime.fromisoformat(text.upper().replace("Z", "+00:00")).astimezone(UTC)
    except (ValueError, OverflowError) as error:
        raise ValueError(f"is no date or time of day ({error}); write it such as 2026-03-01T08:30:00Z") from error


def duration_s(text: str) -> float:
    """Seconds of a duration such as ``6h``, ``30min``, ``1d`` or ``90s``.

    Raises
    ------
    ValueError
        When it is no positive duration with a unit.
    """
    match = _DURATION.match(text)
    seconds = float(match[1]) * _SECONDS[match[2]] if match else 0.0
    if seconds <= 0.0:
        raise ValueError(f"{text!r} is no duration: write a number and a unit, such as 6h, 30min, 1d or 90s")
    return seconds
