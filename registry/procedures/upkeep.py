"""Keeps the record whole: brings the schema up to date, checks what is stored, copies it while it is in use."""

from __future__ import annotations

import hashlib
from pathlib import Path

from registry.errors import Conflict, NothingInForce, Unready
from registry.procedures.boot_sheets import build_sheet
from registry.services import Services
from registry.storage import boots, engine, journal, runs, schema, vehicles
from registry.storage.counts_blob import counts_digest
from registry.storage.engine import Connection


def migrate(services: Services) -> str:
    """Create the database or bring it up to date.

    Returns
    -------
    str
        The revision that it is at now.

    Raises
    ------
    Unready
        It could not be brought up to date; nothing was changed.
    """
    database = engine.make_engine(services.settings.database_url)
    try:
        broken = schema.migrate(database)
    finally:
        database.dispose()
    if broken:
        raise Unready(f"the database was left as it is: {'; '.join(broken)}")
    return schema.head_revision()


def is_empty(services: Services) -> bool:
    """Whether there is no schema yet."""
    with services.read() as c:
        return schema.current_revision(c) is None


def require_ready(services: Services) -> None:
    """Refuse to work on a database that is not at the newest revision.

    Raises
    ------
    Unready
        With what to do.
    """
    with services.read() as c:
        revision = schema.current_revision(c)
    if revision is None:
        raise Unready("the database is empty: run 'rollbook migrate'")
    if revision != schema.head_revision():
        raise Unready(f"the database is at revision {revision}, not {schema.head_revision()}: run 'rollbook migrate'")


def check(services: Services) -> list[str]:
    """Look for damage: the file itself, foreign keys, journal chain, stored digests, boot sheets.

    Returns
    -------
    list of str
        What is wrong, a sentence each; empty when nothing is.
    """
    require_ready(services)
    with services.read() as c:
        return [
            *schema.damaged_pages(c),
            *schema.broken_references(c),
            *journal.verify(c),
            *_damaged_counts(c),
            *_wrong_sheets(c),
        ]


def backup(services: Services, path: Path) -> None:
    """Write a consistent copy of the database while it is in use.

    Raises
    ------
    Conflict
        There is a file at ``path`` already or none can be made there, or the database is PostgreSQL, which has its own
        tools for this.
    """
    if not services.settings.database_url.startswith("sqlite"):
        raise Conflict("a PostgreSQL database is copied with its own tool, pg_dump")
    try:
        path.touch(mode=0o600, exist_ok=False)  # Hashes of keys and passwords are nobody else's business.
    except FileExistsError as error:
        raise Conflict(f"there is a file at {path} already: name another") from error
    except OSError as error:
        raise Conflict(f"{path} cannot be written ({error.strerror}): name another file") from error
    try:
        with services.read() as c:
            engine.copy_sqlite(c, path)
    except BaseException:
        path.unlink()
        raise


def _damaged_counts(c: Connection) -> list[str]:
    findings = []
    for run_id, digest, blob in runs.all_digests(c):
        if counts_digest(blob) != digest:
            findings.append(f"the counts of run {run_id} are not those that were recorded")
    return findings


def _wrong_sheets(c: Connection) -> list[str]:
    """Boot sheets are derived: each must be what the record makes it, and carry the digest of its own lines."""
    findings = []
    kept = boots.all_sheets(c)
    for version in vehicles.all_current(c):
        vehicle_id = version.vehicle_id
        try:
            due = build_sheet(c, vehicle_id)
        except NothingInForce:
            due = None
        sheet = kept.get(vehicle_id)
        if sheet != due:
            findings.append(f"the boot sheet of {vehicle_id} is not what the record says")
        if sheet is not None and hashlib.sha256(sheet.head.encode()).hexdigest() != sheet.digest:
            findings.append(f"the boot sheet of {vehicle_id} does not have the digest of its own lines")
    return findings
