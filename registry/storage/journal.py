"""The journal: append-only, consecutively numbered, each entry's hash covering the entry before.

An entry's hash is the SHA-256 of the JSON array ``[previous_hash, entry, at, who, action, vehicle_id, what]`` in UTF-8
without blanks, ``at`` being microseconds since 1970. The chain starts from 64 zeros. It shows an edited, removed or
inserted entry; entries cut off at its end it cannot show without a copy of a later hash.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from datetime import UTC, datetime, timedelta
from typing import Any

from sqlalchemy import Row, insert, select

from registry.domain.person import JournalEntry
from registry.storage.column_types import canonical_json
from registry.storage.engine import Connection
from registry.storage.pages import Page, page_of
from registry.storage.tables import journal

BEGINNING = "0" * 64
_LAST = select(journal.c.entry, journal.c.hash).order_by(journal.c.entry.desc()).limit(1)
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


@dataclass(frozen=True)
class JournalFilter:
    """Which entries are asked for; None is any. Times are inclusive."""

    from_at: datetime | None = None
    to_at: datetime | None = None
    person: str | None = None
    vehicle_id: str | None = None
    action: str | None = None


def write(
    c: Connection, at: datetime, actor: str, action: str, vehicle_id: str | None, what: dict[str, Any]
) -> JournalEntry:
    """Append an entry, in the transaction of what it tells. Writers follow one another, so numbers are consecutive.

    Parameters
    ----------
    what
        What was done, as plain values; stored as JSON text.
    """
    last = c.execute(_LAST).first()
    number, previous = (1, BEGINNING) if last is None else (last.entry + 1, last.hash)
    text = canonical_json(what)
    made = JournalEntry(
        entry=number,
        at=at.astimezone(UTC),
        who=actor,
        action=action,
        vehicle_id=vehicle_id,
        what=text,
        previous_hash=previous,
        hash=_hash(previous, number, at, (actor, action, vehicle_id, text)),
    )
    c.execute(insert(journal), asdict(made))
    return made


def page(c: Connection, wanted: JournalFilter, limit: int, after: str | None) -> Page[JournalEntry]:
    """Entries, newest first."""
    statement = select(journal)
    if wanted.from_at is not None:
        statement = statement.where(journal.c.at >= wanted.from_at)
    if wanted.to_at is not None:
        statement = statement.where(journal.c.at <= wanted.to_at)
    for column, value in (
        (journal.c.who, wanted.person),
        (journal.c.vehicle_id, wanted.vehicle_id),
        (journal.c.action, wanted.action),
    ):
        if value is not None:
            statement = statement.where(column == value)
    return page_of(c, statement, [journal.c.entry], _entries, limit, after)


def verify(c: Connection) -> list[str]:
    """Walk the chain from its beginning; answer what is wrong with it, a sentence each."""
    findings: list[str] = []
    expected, previous = 1, BEGINNING
    for row in c.execute(select(journal).order_by(journal.c.entry).execution_options(yield_per=1000)):
        entry = _entry(row)
        if entry.entry != expected:
            findings.append(f"journal: entry {expected} is missing")
        elif entry.previous_hash != previous:
            findings.append(f"journal: entry {entry.entry} does not follow from the one before it")
        if entry.hash != _hash(
            entry.previous_hash, entry.entry, entry.at, (entry.who, entry.action, entry.vehicle_id, entry.what)
        ):
            findings.append(f"journal: entry {entry.entry} is not what was written")
        expected, previous = entry.entry + 1, entry.hash
    return findings


def _hash(previous: str, number: int, at: datetime, told: tuple[str, str, str | None, str]) -> str:
    microseconds = (at - _EPOCH) // timedelta(microseconds=1)
    return hashlib.sha256(canonical_json([previous, number, microseconds, *told]).encode()).hexdigest()


def _entries(rows: Sequence[Row[Any]]) -> list[JournalEntry]:
    return [_entry(row) for row in rows]


def _entry(row: Row[Any]) -> JournalEntry:
    return JournalEntry(
        entry=row.entry,
        at=row.at,
        who=row.who,
        action=row.action,
        vehicle_id=row.vehicle_id,
        what=row.what,
        previous_hash=row.previous_hash,
        hash=row.hash,
    )
