"""Runs, their counts and closure maps, and the history of what each run may be used for."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import asdict
from datetime import datetime
from typing import Any

from sqlalchemy import Row, Select, and_, func, insert, select

from registry.domain.run import ClosureStatement, Conditions, Misclosure, Run, RunState
from registry.errors import NotFound
from registry.storage import counts_blob
from registry.storage.counts_blob import Counts
from registry.storage.engine import Connection
from registry.storage.pages import Page, page_of
from registry.storage.tables import run_counts, run_maps, run_states, runs

_later = run_states.alias("later")
#: Runs with their latest state. The latest is found per run, so that a query for the newest few stays small.
_RUNS: Select[Any] = (
    select(runs, run_states.c.use, run_states.c.reasons)
    .join(run_states, run_states.c.run_id == runs.c.run_id)
    .where(
        run_states.c.sequence
        == select(func.max(_later.c.sequence)).where(_later.c.run_id == runs.c.run_id).scalar_subquery()
    )
)
_USABLE = run_states.c.use == "usable"
_BATCH = 500


def add(c: Connection, run: Run, counts_blob: bytes, map_blob: bytes | None) -> None:
    """Record a run with its counts and, when it has one, its closure map; ``run.use`` is its first state."""
    c.execute(insert(runs), _values(run))
    c.execute(insert(run_counts), {"run_id": run.run_id, "counts": counts_blob})
    if map_blob is not None:
        c.execute(insert(run_maps), {"run_id": run.run_id, "map": map_blob})
    add_state(c, run.run_id, RunState(run.use, run.reasons, run.recorded_at, run.recorded_by))


def by_id(c: Connection, run_id: str) -> Run:
    """One run.

    Raises
    ------
    NotFound
        No such run.
    """
    row = c.execute(_RUNS.where(runs.c.run_id == run_id)).first()
    if row is None:
        raise NotFound(f"there is no run {run_id!r}")
    return _run(row)


def find_by_key(c: Connection, vehicle_id: str, run_key: str) -> Run | None:
    """The run that a vehicle handed in under a key, if any."""
    row = c.execute(_RUNS.where(runs.c.vehicle_id == vehicle_id, runs.c.run_key == run_key)).first()
    return None if row is None else _run(row)


def by_ids(c: Connection, ids: Iterable[str]) -> list[Run]:
    """Several runs, in the order asked.

    Raises
    ------
    NotFound
        One of them does not exist; it is named.
    """
    wanted = list(ids)
    found = {
        row.run_id: _run(row) for part in _batches(wanted) for row in c.execute(_RUNS.where(runs.c.run_id.in_(part)))
    }
    missing = [run_id for run_id in wanted if run_id not in found]
    if missing:
        raise NotFound(f"there is no run {missing[0]!r}")
    return [found[run_id] for run_id in wanted]


def page(c: Connection, vehicle_id: str, limit: int, after: str | None) -> Page[Run]:
    """A vehicle's runs, the one driven last first."""
    statement = _RUNS.where(runs.c.vehicle_id == vehicle_id)
    return page_of(c, statement, [runs.c.started_at, runs.c.sequence], _runs, limit, after)


def usable(
    c: Connection,
    vehicle_id: str,
    *,
    started_from: datetime | None = None,
    ended_until: datetime | None = None,
    limit: int | None = None,
) -> list[Run]:
    """A vehicle's usable runs, newest first: started at ``started_from`` or later, ended by ``ended_until``."""
    statement = _RUNS.where(runs.c.vehicle_id == vehicle_id, _USABLE)
    if started_from is not None:
        statement = statement.where(runs.c.started_at >= started_from)
    if ended_until is not None:
        statement = statement.where(runs.c.ended_at <= ended_until)
    statement = statement.order_by(runs.c.started_at.desc(), runs.c.sequence.desc())
    return _runs(c.execute(statement if limit is None else statement.limit(limit)).all())


def latest_end(c: Connection, vehicle_id: str, until: datetime) -> datetime | None:
    """When the last usable run that had ended by ``until`` ended."""
    statement = _RUNS.where(runs.c.vehicle_id == vehicle_id, _USABLE, runs.c.ended_at <= until)
    ended_at: datetime | None = c.scalar(
        statement.with_only_columns(runs.c.ended_at).order_by(runs.c.ended_at.desc()).limit(1)
    )
    return ended_at


def overlapping(c: Connection, vehicle_id: str, started_at: datetime, ended_at: datetime) -> list[Run]:
    """A vehicle's runs that share some time with the one from ``started_at`` to ``ended_at``, oldest first."""
    shared = and_(runs.c.vehicle_id == vehicle_id, runs.c.started_at < ended_at, runs.c.ended_at > started_at)
    return _runs(c.execute(_RUNS.where(shared).order_by(runs.c.started_at, runs.c.sequence)).all())


def counts_bytes(c: Connection, run_id: str) -> bytes:
    """The stored counts of a run as they are kept.

    Raises
    ------
    NotFound
        No such run.
    """
    blob: bytes | None = c.scalar(select(run_counts.c.counts).where(run_counts.c.run_id == run_id))
    if blob is None:
        raise NotFound(f"there are no counts of a run {run_id!r}")
    return blob


def counts(c: Connection, run_id: str) -> Counts:
    """The counter readings of a run as they were handed in.

    Raises
    ------
    NotFound
        No such run.
    """
    return counts_blob.decode(counts_bytes(c, run_id))


def maps(c: Connection, run_ids: Iterable[str]) -> dict[str, bytes]:
    """The closure maps of several runs; runs without one are left out."""
    return {
        row.run_id: row.map
        for part in _batches(list(run_ids))
        for row in c.execute(select(run_maps).where(run_maps.c.run_id.in_(part)))
    }


def put_map(c: Connection, run_id: str, blob: bytes) -> None:
    """Keep a run's closure map in place of the one before it: it is derived from the counts."""
    c.execute(run_maps.delete().where(run_maps.c.run_id == run_id))
    c.execute(insert(run_maps), {"run_id": run_id, "map": blob})


def add_state(c: Connection, run_id: str, state: RunState) -> None:
    """Record what a run may be used for from now on."""
    values = {"run_id": run_id, "use": state.use, "reasons": list(state.reasons), "at": state.at, "by": state.by}
    c.execute(insert(run_states), values)


def states(c: Connection, run_id: str) -> list[RunState]:
    """The history of what a run might be used for, oldest first."""
    statement = select(run_states).where(run_states.c.run_id == run_id).order_by(run_states.c.sequence)
    return [RunState(row.use, tuple(row.reasons), row.at, row.by) for row in c.execute(statement)]


def changes_mark(c: Connection, vehicle_id: str, until: datetime) -> str:
    """A short text that changes whenever a run that had ended by ``until`` was added or changed its state."""
    statement = (
        select(func.count(), func.coalesce(func.max(run_states.c.sequence), 0))
        .join(runs, runs.c.run_id == run_states.c.run_id)
        .where(runs.c.vehicle_id == vehicle_id, runs.c.ended_at <= until)
    )
    number, last = c.execute(statement).one()
    return f"{number}-{last}"


def all_digests(c: Connection) -> Iterator[tuple[str, str, bytes]]:
    """Identity, recorded digest and counts of every run, a few at a time, for the check of what is stored."""
    statement = select(runs.c.run_id, runs.c.counts_digest, run_counts.c.counts).outerjoin(
        run_counts, run_counts.c.run_id == runs.c.run_id
    )
    for row in c.execute(statement.execution_options(yield_per=100)):
        yield row.run_id, row.counts_digest, row.counts or b""


def _batches(items: list[str]) -> list[list[str]]:
    return [items[i : i + _BATCH] for i in range(0, len(items), _BATCH)]


def _values(run: Run) -> dict[str, Any]:
    plain = (
        "run_id",
        "vehicle_id",
        "run_key",
        "vehicle_version",
        "started_at",
        "ended_at",
        "duration_s",
        "samples",
        "distance_m",
        "turned_rad",
        "content_digest",
        "counts_digest",
        "recorded_at",
        "recorded_by",
    )
    return {
        **{name: getattr(run, name) for name in plain},
        **{f"closure_{name}": value for name, value in asdict(run.closure).items()},
        **asdict(run.conditions),
        **misclosure_values("misclosure", run.misclosure),
    }


def _runs(rows: Sequence[Row[Any]]) -> list[Run]:
    return [_run(row) for row in rows]


def _run(row: Row[Any]) -> Run:
    return Run(
        run_id=row.run_id,
        vehicle_id=row.vehicle_id,
        run_key=row.run_key,
        vehicle_version=row.vehicle_version,
        started_at=row.started_at,
        ended_at=row.ended_at,
        duration_s=row.duration_s,
        samples=row.samples,
        distance_m=row.distance_m,
        turned_rad=row.turned_rad,
        closure=ClosureStatement(
            x_m=row.closure_x_m,
            y_m=row.closure_y_m,
            heading_rad=row.closure_heading_rad,
            distance_m=row.closure_distance_m,
            turns=row.closure_turns,
            position_sd_m=row.closure_position_sd_m,
            heading_sd_rad=row.closure_heading_sd_rad,
        ),
        conditions=Conditions(
            start_mark=row.start_mark,
            end_mark=row.end_mark,
            course=row.course,
            surface=row.surface,
            load_kg=row.load_kg,
            driven_by=row.driven_by,
            read_by=row.read_by,
            instrument=row.instrument,
            note=row.note,
        ),
        misclosure=misclosure_of(row, "misclosure"),
        content_digest=row.content_digest,
        counts_digest=row.counts_digest,
        use=row.use,
        reasons=tuple(row.reasons),
        recorded_at=row.recorded_at,
        recorded_by=row.recorded_by,
    )


def misclosure_values(prefix: str, misclosure: Misclosure | None) -> dict[str, float | None]:
    """The four columns of a misclosure."""
    names = ("x_m", "y_m", "heading_rad", "distance_m")
    return {f"{prefix}_{name}": None if misclosure is None else getattr(misclosure, name) for name in names}


def misclosure_of(row: Row[Any], prefix: str) -> Misclosure | None:
    """The misclosure in four columns; None when nothing was measured."""
    columns = row._mapping
    values = [columns[f"{prefix}_{name}"] for name in ("x_m", "y_m", "heading_rad", "distance_m")]
    return None if all(value is None for value in values) else Misclosure(*values)
