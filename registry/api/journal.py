"""The journal: who did what, when, why."""

from __future__ import annotations

from typing import Annotated, Any

import orjson
from flask import Response
from pydantic import Field

from registry.api import bodies, fields
from registry.api.bodies import Answer, Described, PageAnswer, PageQuery
from registry.api.document import resource
from registry.api.keys import needs, services
from registry.domain.person import JournalEntry
from registry.storage import journal as stored
from registry.storage.journal import JournalFilter

doors = resource("journal")


class JournalQuery(PageQuery):
    """Which entries."""

    from_: Annotated[fields.Time | None, Field(alias="from", description="Not before this time")] = None
    to: Annotated[fields.Time | None, Field(description="Not after this time")] = None
    person: fields.Name | None = None
    vehicle_id: fields.VehicleId | None = None
    action: fields.Name | None = None


class JournalAnswer(Answer):
    """An entry; its hash covers the one before it."""

    entry: int
    at: fields.Time
    who: str
    action: str
    vehicle_id: str | None
    what: dict[str, Any]
    previous_hash: str
    hash: str


def described(entry: JournalEntry) -> Described:
    """An entry as the doors write it."""
    return {**vars(entry), "at": fields.instant(entry.at), "what": orjson.loads(entry.what)}


@doors.get("/journal", responses={200: PageAnswer[JournalAnswer]})
@needs("reader")
def list_journal(query: JournalQuery) -> Response:
    """Entries of the journal, newest first."""
    with services().read() as c:
        wanted = JournalFilter(query.from_, query.to, query.person, query.vehicle_id, query.action)
        page = stored.page(c, wanted, query.limit, query.after)
    return bodies.reply_page(page, described)
