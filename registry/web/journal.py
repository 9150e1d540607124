"""The journal as a table, newest first."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from flask import Blueprint, render_template, request, url_for

from registry.domain.person import JournalEntry
from registry.storage import journal as storage
from registry.storage.journal import JournalFilter
from registry.web.current import services
from registry.web.figures import moment

PAGE = 100
LONGEST = 160

#: Identities that lead to a page of their own; the others only tie records together and are left out here.
_LEADS_TO = {"calibration_id": ("web.calibration", "calibration"), "run_id": ("web.run", "run")}


@dataclass(frozen=True)
class Detail:
    """One field of what was done, in words, with the page it leads to."""

    name: str
    text: str
    href: str | None = None


@dataclass(frozen=True)
class Line:
    """One entry as shown."""

    entry: int
    at: datetime
    who: str
    action: str
    vehicle_id: str | None
    details: tuple[Detail, ...]


def line_of(entry: JournalEntry) -> Line:
    """An entry with its content field by field; long texts and digests are shortened, the record keeps them whole."""
    what: dict[str, Any] = json.loads(entry.what)
    return Line(entry.entry, entry.at, entry.who, entry.action, entry.vehicle_id, tuple(_details(what)))


def _details(what: dict[str, Any], before: str = "") -> Iterator[Detail]:
    for name, value in what.items():
        words = f"{before} {name}".strip().replace("_", " ")
        if value is None or value in ([], {}):
            continue
        if name in _LEADS_TO:
            endpoint, text = _LEADS_TO[name]
            yield Detail("", text, url_for(endpoint, **{name: value}))
        elif isinstance(value, dict):
            yield from _details(value, words)
        elif not name.endswith("_id"):
            yield Detail(words, _shown(name, value))


def _shown(name: str, value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.6g}"
    text = value if isinstance(value, str) else json.dumps(value, ensure_ascii=False)
    if name.endswith("digest"):
        return f"{text[:12]} …"
    if _TIME.fullmatch(text):
        return moment(datetime.fromisoformat(text))
    return text if len(text) <= LONGEST else f"{text[:LONGEST]} …"


_TIME = re.compile(r"\d{4}-\d\d-\d\dT[\d:.]+Z")


def doors(pages: Blueprint) -> None:
    """Put the journal on the blueprint."""
    pages.add_url_rule("/journal", "journal", _journal)


def _journal() -> str:
    with services().read() as c:
        page = storage.page(c, JournalFilter(), PAGE, request.args.get("after"))
    return render_template("journal.html", entries=[line_of(entry) for entry in page.items], after=page.after)
