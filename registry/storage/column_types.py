"""Column types that refuse what a database would quietly change: naive times, NaN, numbers of numpy."""

from __future__ import annotations

import json
import math
import numbers
from datetime import UTC, datetime
from typing import Any

from sqlalchemy import BigInteger, DateTime, Dialect, Double, Integer, Text
from sqlalchemy.types import TypeDecorator


class UtcTime(TypeDecorator[datetime]):
    """An aware time, answered in UTC. SQLite keeps no zone, so it is stored there as the UTC wall time."""

    impl = DateTime(timezone=True)
    cache_ok = True

    def process_bind_param(self, value: datetime | None, dialect: Dialect) -> datetime | None:
        if value is None:
            return None
        if value.tzinfo is None:
            raise ValueError(f"a time without a zone cannot be stored: {value!r}")
        at = value.astimezone(UTC)
        return at.replace(tzinfo=None) if dialect.name == "sqlite" else at

    def process_result_value(self, value: datetime | None, dialect: Dialect) -> datetime | None:
        if value is None:
            return None
        return value.replace(tzinfo=UTC) if value.tzinfo is None else value.astimezone(UTC)


class Real(TypeDecorator[float]):
    """A finite double. SQLite would store NaN as NULL."""

    impl = Double
    cache_ok = True

    def process_bind_param(self, value: Any, dialect: Dialect) -> float | None:
        if value is None:
            return None
        number = float(value)
        if not math.isfinite(number):
            raise ValueError(f"{number} cannot be stored: only finite numbers can")
        return number


class Whole(TypeDecorator[int]):
    """A whole number of up to 64 bits. SQLite would store numpy's as a blob."""

    impl = BigInteger().with_variant(Integer(), "sqlite")
    cache_ok = True

    def process_bind_param(self, value: Any, dialect: Dialect) -> int | None:
        if value is None:
            return None
        if isinstance(value, bool) or not isinstance(value, numbers.Integral):
            raise TypeError(f"{value!r} is no whole number")
        return int(value)


class JsonText(TypeDecorator[Any]):
    """A small structure as JSON text with sorted keys, the same on every database."""

    impl = Text
    cache_ok = True

    def process_bind_param(self, value: Any, dialect: Dialect) -> str | None:
        return None if value is None else canonical_json(value)

    def process_result_value(self, value: str | None, dialect: Dialect) -> Any:
        return None if value is None else json.loads(value)


def canonical_json(value: Any) -> str:
    """JSON with sorted keys and no blanks; refuses NaN and infinities with a ``ValueError``."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
