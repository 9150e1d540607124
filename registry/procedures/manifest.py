"""Load the logged runs that a manifest names.

The whole manifest is checked first, with every tick log that it names; only then is anything recorded, run by run.
Loading the same manifest again records nothing twice, so one that was interrupted is simply loaded again.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from registry.domain.person import Actor
from registry.domain.run import Run
from registry.errors import Conflict, FieldError, Invalid, NotFound, TooLarge
from registry.procedures import intake
from registry.procedures.intake import RunStatement
from registry.procedures.manifest_rows import MAX_ERRORS, ManifestRow, read_rows, refuse
from registry.procedures.tick_log import TickLog, read_tick_log
from registry.services import Services

#: Told the share done (0 to 1) and what is going on.
Progress = Callable[[float, str], None]


@dataclass(frozen=True)
class LoadedRun:
    """What became of one row: the run, and whether it is new on the record."""

    row: int
    run: Run
    created: bool


def load_manifest(
    services: Services, actor: Actor, path: Path, progress: Progress | None = None
) -> tuple[LoadedRun, ...]:
    """
    Load all runs of a manifest.

    Parameters
    ----------
    services, actor
        The record, and who is acting.
    path
        The manifest; tick logs are named relative to its folder.
    progress
        Told the share done and the run at hand.

    Returns
    -------
    tuple of LoadedRun
        In the order of the rows.

    Raises
    ------
    Invalid
        Anything in the manifest or its logs is wrong; each error names file, row, column and remedy.
    TooLarge
        The manifest is larger than any needs to be.
    """
    tell = progress or (lambda _share, _what: None)
    rows = read_rows(path)
    digests = _check_all(services, actor, path, rows, tell)
    loaded = []
    for done, (row, digest) in enumerate(zip(rows, digests, strict=True)):
        tell(0.5 + 0.5 * done / len(rows), f"recording {row.run_key}")
        statement, _ = _statement(row)
        if statement.content_digest != digest:
            detail = "changed while it was being loaded: load the manifest again"
            raise Conflict(f"{row.ticks.name} {detail}", (FieldError(f"{path.name} row {row.row}", detail),))
        run, created = intake.take_run(services, actor, row.vehicle_id, statement)
        loaded.append(LoadedRun(row.row, run, created))
    tell(1.0, f"{len(rows)} runs")
    return tuple(loaded)


def _check_all(services: Services, actor: Actor, path: Path, rows: list[ManifestRow], tell: Progress) -> list[str]:
    """Check every row with its log; answers the content digests, by which a log that changes meanwhile is noticed."""
    errors: list[FieldError] = []
    digests: list[str] = []
    first_with: dict[tuple[str, str], tuple[int, str]] = {}
    for done, row in enumerate(rows):
        tell(0.5 * done / len(rows), f"checking {row.run_key}")
        try:
            digests.append(_check_one(services, actor, path, row))
            earlier = first_with.setdefault((row.vehicle_id, row.run_key), (row.row, digests[-1]))
            if earlier[1] != digests[-1]:
                detail = f"{row.run_key!r} stands in row {earlier[0]} with other content: give each run its own key"
                errors.append(FieldError(f"{path.name} row {row.row} column run_key", detail))
        except (Invalid, TooLarge) as refusal:
            errors.extend(refusal.errors or (FieldError(f"{path.name} row {row.row}", refusal.detail),))
        if len(errors) >= MAX_ERRORS:
            break
    if errors:
        refuse(path.name, errors)
    return digests


def _check_one(services: Services, actor: Actor, path: Path, row: ManifestRow) -> str:
    place = f"{path.name} row {row.row}"
    statement, log = _statement(row)
    try:
        intake.check_run(services, actor, row.vehicle_id, statement)
    except NotFound as refusal:
        raise Invalid(refusal.detail, (FieldError(f"{place} column vehicle_id", refusal.detail),)) from refusal
    except Conflict as refusal:
        raise Invalid(refusal.detail, (FieldError(f"{place} column run_key", refusal.detail),)) from refusal
    except Invalid as refusal:
        errors = (FieldError(_place_of(error.pointer, place, row, log), error.detail) for error in refusal.errors)
        raise Invalid(refusal.detail, tuple(errors)) from refusal
    return statement.content_digest


def _place_of(pointer: str, place: str, row: ManifestRow, log: TickLog) -> str:
    """Where a person finds what a pointer into the run names: a row and column of the log, or of the manifest."""
    _, _, steps = pointer.partition("/")
    name, _, rest = steps.partition("/")
    if name in ("time_s", "left_counts", "right_counts"):
        where = f"{row.ticks.name} row {log.row_of(int(rest))}" if rest.isdigit() else row.ticks.name
        return f"{where} column {name}"
    column = rest if name == "closure" else name
    return f"{place} column {column}" if column else place


def _statement(row: ManifestRow) -> tuple[RunStatement, TickLog]:
    log = read_tick_log(row.ticks)
    statement = RunStatement(
        run_key=row.run_key,
        started_at=row.started_at,
        time_s=log.time_s,
        left_counts=log.left_counts,
        right_counts=log.right_counts,
        closure=row.closure,
        conditions=row.conditions,
        content_digest="",
    )
    return intake.sealed(statement), log
