"""Boots, the sheet each vehicle is to load, and the digests that were ever handed out."""

from __future__ import annotations

import json
from collections.abc import Sequence
from datetime import datetime
from typing import Any

from sqlalchemy import Dialect, Row, and_, bindparam, func, insert, or_, select, true
from sqlalchemy.sql.compiler import SQLCompiler

from registry.domain.boot import Boot, BootSheet, BootStatement
from registry.domain.person import KeyOwner
from registry.storage.engine import Bare, Connection
from registry.storage.pages import Page, page_of
from registry.storage.tables import boot_sheets, boots, issued_digests, keys, people

_NEWEST_FIRST = (boots.c.booted_at.desc(), boots.c.sequence.desc())
_SHEET = [column.label(f"sheet_{column.name}") for column in boot_sheets.c]
#: The whole of what a boot asks for: the owner of the key and the vehicle's sheet, in one query.
_SHEET_WITH_KEY = (
    select(keys.c.person, keys.c.vehicle_id, people.c.role, *_SHEET)
    .outerjoin(people, people.c.name == keys.c.person)
    .outerjoin(boot_sheets, boot_sheets.c.vehicle_id == bindparam("vehicle"))
    .where(keys.c.key_hash == bindparam("hash"), keys.c.revoked_at.is_(None))
)


def add(c: Connection, boot: Boot) -> None:
    """Record a boot."""
    statement = boot.statement
    c.execute(
        insert(boots).values(
            boot_id=boot.boot_id,
            vehicle_id=boot.vehicle_id,
            stated_number=statement.calibration_number,
            stated_digest=statement.digest,
            source=statement.source,
            stated_booted_at=statement.booted_at,
            age_s=statement.age_s,
            software=statement.software,
            booted_at=boot.booted_at,
            calibration_id=boot.calibration_id,
            matched=bool(boot.matched),
            recorded_at=boot.recorded_at,
        )
    )


def page(c: Connection, vehicle_id: str, limit: int, after: str | None) -> Page[Boot]:
    """A vehicle's boots, newest first."""
    statement = select(boots).where(boots.c.vehicle_id == vehicle_id)
    return page_of(c, statement, [boots.c.booted_at, boots.c.sequence], _boots, limit, after)


def all_for(c: Connection, vehicle_id: str) -> list[Boot]:
    """All boots of a vehicle, oldest first."""
    statement = select(boots).where(boots.c.vehicle_id == vehicle_id)
    return _boots(c.execute(statement.order_by(boots.c.booted_at, boots.c.sequence)).all())


def latest(c: Connection, vehicle_id: str, until: datetime | None = None) -> Boot | None:
    """A vehicle's last boot, or the last one up to ``until``."""
    statement = select(boots).where(boots.c.vehicle_id == vehicle_id)
    if until is not None:
        statement = statement.where(boots.c.booted_at <= until)
    row = c.execute(statement.order_by(*_NEWEST_FIRST).limit(1)).first()
    return None if row is None else _boot(row)


def mismatched_since(c: Connection, vehicle_id: str) -> datetime | None:
    """The first boot after the last one that matched, in the order of the boots; None when the last one matched."""
    of_vehicle = boots.c.vehicle_id == vehicle_id
    matched = select(boots.c.booted_at, boots.c.sequence).where(of_vehicle, boots.c.matched.is_(True))
    last = c.execute(matched.order_by(*_NEWEST_FIRST).limit(1)).first()
    wrong = select(boots.c.booted_at).where(of_vehicle, boots.c.matched.is_(False))
    if last is not None:
        at_once = and_(boots.c.booted_at == last.booted_at, boots.c.sequence > last.sequence)
        wrong = wrong.where(or_(boots.c.booted_at > last.booted_at, at_once))
    since: datetime | None = c.scalar(wrong.order_by(boots.c.booted_at, boots.c.sequence).limit(1))
    return since


def latest_all(c: Connection) -> dict[str, Boot]:
    """The last boot of every vehicle that has reported one."""
    place = func.row_number().over(partition_by=boots.c.vehicle_id, order_by=_NEWEST_FIRST).label("place")
    ranked = select(boots.c.sequence, place).subquery()
    statement = select(boots).join(ranked, ranked.c.sequence == boots.c.sequence).where(ranked.c.place == 1)
    return {row.vehicle_id: _boot(row) for row in c.execute(statement)}


def loaded_by(c: Connection, calibration_id: str) -> tuple[str, ...]:
    """Vehicles that have reported booting on a calibration."""
    statement = select(boots.c.vehicle_id).where(boots.c.calibration_id == calibration_id).distinct()
    return tuple(c.scalars(statement.order_by(boots.c.vehicle_id)))


def put_sheet(c: Connection, vehicle_id: str, sheet: BootSheet | None) -> None:
    """Keep what a vehicle is to load from now on; None is nothing."""
    c.execute(boot_sheets.delete().where(boot_sheets.c.vehicle_id == vehicle_id))
    if sheet is not None:
        c.execute(
            insert(boot_sheets).values(
                vehicle_id=vehicle_id,
                calibration_id=sheet.calibration_id,
                calibration_number=sheet.calibration_number,
                head=sheet.head,
                digest=sheet.digest,
                condition=sheet.condition,
                reasons=list(sheet.reasons),
                answer=sheet.answer,
            )
        )


def sheet(c: Connection, vehicle_id: str) -> BootSheet | None:
    """What a vehicle is to load, if anything is in force."""
    row = c.execute(select(*_SHEET).where(boot_sheets.c.vehicle_id == vehicle_id)).first()
    return None if row is None else _sheet(row)


def all_sheets(c: Connection) -> dict[str, BootSheet]:
    """What every vehicle is to load; vehicles with nothing in force are left out."""
    return {row.sheet_vehicle_id: _sheet(row) for row in c.execute(select(*_SHEET).where(true()))}


def sheet_with_key(bare: Bare, key_hash: str, vehicle_id: str) -> tuple[KeyOwner | None, BootSheet | None]:
    """The owner of a valid key and the sheet of a vehicle, in one query; without an owner there is no sheet either.

    Why this form: it is asked at every boot. The query is compiled once for a kind of database and handed to the
    driver as it is, which costs a third of what the statement object does.
    """
    sql, names = _prepared(bare.dialect)
    given = {"hash": key_hash, "vehicle": vehicle_id}
    cursor = bare.connection.cursor()
    try:
        cursor.execute(sql, given if names is None else tuple(given[name] for name in names))
        row = cursor.fetchone()
    finally:
        cursor.close()
    if row is None:
        return None, None
    person, owner, role, *kept = row
    return KeyOwner(person, owner, role), None if kept[0] is None else _sheet_of(*kept)


_compiled: dict[str, tuple[str, list[str] | None]] = {}


def _prepared(dialect: Dialect) -> tuple[str, list[str] | None]:
    """The boot query as text for a kind of database, and the order of its parameters where they have no names."""
    name = dialect.name
    if name not in _compiled:
        made = _SHEET_WITH_KEY.compile(dialect=dialect)
        names = made.positiontup if isinstance(made, SQLCompiler) and made.positional else None
        _compiled[name] = (str(made), None if names is None else list(names))
    return _compiled[name]


def issue_digest(c: Connection, sheet: BootSheet, at: datetime) -> None:
    """Remember that parameters of this digest were handed out, so that a boot report of them is understood."""
    if issued_for(c, sheet.vehicle_id, sheet.digest) is None:
        c.execute(
            insert(issued_digests).values(
                vehicle_id=sheet.vehicle_id, digest=sheet.digest, calibration_id=sheet.calibration_id, issued_at=at
            )
        )


def issued_for(c: Connection, vehicle_id: str, digest: str) -> str | None:
    """The calibration that a vehicle was handed under a digest, if it ever was."""
    wanted = (issued_digests.c.vehicle_id == vehicle_id, issued_digests.c.digest == digest)
    calibration_id: str | None = c.scalar(select(issued_digests.c.calibration_id).where(*wanted))
    return calibration_id


def _boots(rows: Sequence[Row[Any]]) -> list[Boot]:
    return [_boot(row) for row in rows]


def _boot(row: Row[Any]) -> Boot:
    statement = BootStatement(
        calibration_number=row.stated_number,
        digest=row.stated_digest,
        source=row.source,
        booted_at=row.stated_booted_at,
        age_s=row.age_s,
        software=row.software,
    )
    return Boot(
        boot_id=row.boot_id,
        vehicle_id=row.vehicle_id,
        statement=statement,
        booted_at=row.booted_at,
        calibration_id=row.calibration_id,
        matched=row.matched,
        recorded_at=row.recorded_at,
    )


def _sheet(row: Row[Any]) -> BootSheet:
    return BootSheet(
        vehicle_id=row.sheet_vehicle_id,
        calibration_id=row.sheet_calibration_id,
        calibration_number=row.sheet_calibration_number,
        head=row.sheet_head,
        digest=row.sheet_digest,
        condition=row.sheet_condition,
        reasons=tuple(row.sheet_reasons),
        answer=row.sheet_answer,
    )


def _sheet_of(*columns: Any) -> BootSheet:
    """A sheet from the bare columns of the boot query, in the order of the table."""
    vehicle_id, calibration_id, number, head, digest, condition, reasons, answer = columns
    told = tuple(json.loads(reasons))
    return BootSheet(vehicle_id, calibration_id, number, head, digest, condition, told, answer)
