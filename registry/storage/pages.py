"""Pages of a collection, newest first, by key and not by offset: rows added meanwhile shift nothing."""

from __future__ import annotations

import base64
import binascii
import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any, Generic, TypeVar

from sqlalchemy import ColumnElement, Connection, Row, Select, literal, tuple_

from registry.errors import FieldError, Invalid
from registry.storage.column_types import UtcTime

T = TypeVar("T")


@dataclass(frozen=True)
class Page(Generic[T]):
    """Some items of a collection; ``after`` is the token that continues it, None at its end."""

    items: tuple[T, ...]
    after: str | None


def page_of(
    c: Connection,
    statement: Select[Any],
    keys: Sequence[ColumnElement[Any]],
    build: Callable[[Sequence[Row[Any]]], Sequence[T]],
    limit: int,
    after: str | None,
) -> Page[T]:
    """One page of a statement, descending by ``keys`` (together unique).

    Parameters
    ----------
    build
        Makes the items from the page's rows, one a row.
    limit
        Largest number of items.
    after
        Token of the page before, or None for the first page.

    Raises
    ------
    Invalid
        The token is none of ours.
    """
    if after is not None:
        values = _values_of(after, keys)
        statement = statement.where(
            tuple_(*keys) < tuple_(*(literal(v, k.type) for v, k in zip(values, keys, strict=True)))
        )
    marked = statement.add_columns(*(key.label(f"page_key_{i}") for i, key in enumerate(keys)))
    rows = c.execute(marked.order_by(*(key.desc() for key in keys)).limit(limit + 1)).all()
    more = len(rows) > limit
    rows = rows[:limit]
    token = _token_of([rows[-1]._mapping[f"page_key_{i}"] for i in range(len(keys))]) if more else None
    return Page(tuple(build(rows)), token)


def _token_of(values: Sequence[Any]) -> str:
    plain = [v.isoformat() if isinstance(v, datetime) else v for v in values]
    return base64.urlsafe_b64encode(json.dumps(plain, separators=(",", ":")).encode()).decode().rstrip("=")


def _values_of(token: str, keys: Sequence[ColumnElement[Any]]) -> list[Any]:
    try:
        if not token.isascii() or not token.replace("-", "a").replace("_", "a").isalnum():
            raise ValueError("characters")
        plain = json.loads(base64.urlsafe_b64decode(token + "=" * (-len(token) % 4)))
        if not isinstance(plain, list) or len(plain) != len(keys):
            raise ValueError("another collection's")
        return [_value(v, key) for v, key in zip(plain, keys, strict=True)]
    except (ValueError, TypeError, RecursionError, OverflowError, binascii.Error) as error:
        detail = "is no token of this collection: take 'after' from the page before, unchanged"
        raise Invalid(f"after {detail}", (FieldError("/after", detail),)) from error


def _value(value: Any, key: ColumnElement[Any]) -> Any:
    if isinstance(key.type, UtcTime):
        at = datetime.fromisoformat(value)
        if at.tzinfo is None:
            raise ValueError("a time without a zone")
        return at.astimezone(UTC)
    if isinstance(value, bool) or not isinstance(value, int) or not -(2**63) <= value < 2**63:
        raise ValueError("no whole number")
    return value
