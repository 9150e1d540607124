"""Read a manifest: which runs are to be loaded, as a person wrote them down. Every cell that is wrong is named."""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, NoReturn

from registry.clock import parse_time
from registry.domain.run import ClosureStatement, Conditions
from registry.errors import FieldError, Invalid, TooLarge

NEEDED = ("vehicle_id", "run_key", "started_at", "ticks_file")
CLOSURE = ("x_mm", "y_mm", "heading_deg", "distance_mm", "turns", "position_sd_mm", "heading_sd_deg")
OPTIONAL = ("start_mark", "end_mark", "course", "surface", "load_kg", "driven_by", "read_by", "instrument", "note")
MAX_MANIFEST_BYTES = 16_000_000
#: Errors named of one manifest.
MAX_ERRORS = 20

_NUMBER = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?")
#: Far beyond any machine; the same bounds hold at the HTTP door.
_LARGEST = {"heading_deg": 1e6, "heading_sd_deg": 1e6, "load_kg": 1e6}


@dataclass(frozen=True)
class ManifestRow:
    """One run as its row states it, in SI; its ticks stay in their file until they are needed."""

    row: int
    vehicle_id: str
    run_key: str
    started_at: datetime
    ticks: Path
    closure: ClosureStatement
    conditions: Conditions


def refuse(name: str, errors: list[FieldError]) -> NoReturn:
    """Refuse a whole manifest for what is wrong in it, at most `MAX_ERRORS` of them."""
    first = errors[0]
    raise Invalid(f"{name} is not loaded: {first.pointer} {first.detail}", tuple(errors[:MAX_ERRORS]))


def read_rows(path: Path) -> list[ManifestRow]:
    """
    Read every row of a manifest.

    Raises
    ------
    Invalid
        Names the rows and cells that are wrong.
    TooLarge
        The file is larger than `MAX_MANIFEST_BYTES`.
    """
    reader = csv.reader(io.StringIO(_text(path), newline=""), strict=True)
    errors: list[FieldError] = []
    rows: list[ManifestRow] = []
    try:
        columns = _columns(next(reader, []), path.name)
        for number, cells in enumerate(reader, start=2):
            if any(cell.strip() for cell in cells):
                row = _row(number, columns, cells, path, errors)
                if row is not None:
                    rows.append(row)
            if len(errors) >= MAX_ERRORS:
                break
    except csv.Error as error:
        errors.append(FieldError(f"{path.name} line {reader.line_num}", f"is no row of a CSV file ({error})"))
    if not rows and not errors:
        errors.append(FieldError(f"{path.name} row 2", "is missing: name one run a row, below the header"))
    if errors:
        refuse(path.name, errors)
    return rows


def _text(path: Path) -> str:
    try:
        with path.open("rb") as file:
            data = file.read(MAX_MANIFEST_BYTES + 1)
    except OSError as error:
        detail = f"cannot be read ({error.strerror})"
        raise Invalid(f"{path} {detail}", (FieldError(path.name, detail),)) from error
    if len(data) > MAX_MANIFEST_BYTES:
        raise TooLarge(f"{path.name} is larger than {MAX_MANIFEST_BYTES // 1_000_000} MB: split it")
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        detail = "is UTF-16 text: save it as CSV in UTF-8"
        raise Invalid(f"{path.name} {detail}", (FieldError(path.name, detail),))
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = data.count(b"\n", 0, error.start) + 1
        detail = "holds a letter that is not UTF-8: save the file as CSV in UTF-8"
        raise Invalid(f"{path.name} row {row} {detail}", (FieldError(f"{path.name} row {row}", detail),)) from error


def _columns(header: list[str], name: str) -> list[str]:
    columns = [cell.strip() for cell in header]
    place = f"{name} row 1"
    known = NEEDED + CLOSURE + OPTIONAL
    if len(columns) == 1:
        for sign, said in ((";", "semicolons"), ("\t", "tabs")):
            if sign in columns[0]:
                refuse(name, [FieldError(place, f"is separated by {said}: save with commas, and points in numbers")])
    if not any(columns):
        refuse(name, [FieldError(place, f"is empty: begin with the header {','.join(known)}")])
    errors = [
        FieldError(f"{place} column {c!r}", f"is unknown: the columns are {', '.join(known)}")
        for c in columns
        if c not in known
    ]
    missing = [c for c in NEEDED + CLOSURE if c not in columns]
    errors += [FieldError(place, f"has no column {c}: add it; its cells may stay empty") for c in missing]
    errors += [FieldError(place, f"names {c} twice: keep one") for c in known if columns.count(c) > 1]
    if errors:
        refuse(name, errors)
    return columns


def _row(number: int, columns: list[str], cells: list[str], path: Path, errors: list[FieldError]) -> ManifestRow | None:
    """Read one row; what is wrong with it is appended to ``errors``."""
    place = f"{path.name} row {number}"
    before = len(errors)
    if len(cells) != len(columns):
        detail = f"has {len(cells)} cells where the header has {len(columns)} columns (a comma in a text needs quotes)"
        errors.append(FieldError(place, detail))
        return None
    cell = {column: text.strip() for column, text in zip(columns, cells, strict=True)}

    def read(column: str, parse: Callable[[str, str], Any]) -> Any:
        text = cell.get(column, "")
        if not text:
            return None
        try:
            return parse(column, text)
        except ValueError as error:
            errors.append(FieldError(f"{place} column {column}", str(error)))
            return None

    errors.extend(FieldError(f"{place} column {c}", "is empty: it is needed") for c in NEEDED if not cell[c])
    started_at = read("started_at", _time)
    closure = ClosureStatement(
        x_m=_metres(read("x_mm", _number)),
        y_m=_metres(read("y_mm", _number)),
        heading_rad=_radians(read("heading_deg", _number)),
        distance_m=_metres(read("distance_mm", _number)),
        turns=read("turns", _turns),
        position_sd_m=_metres(read("position_sd_mm", _number)),
        heading_sd_rad=_radians(read("heading_sd_deg", _number)),
    )
    texts = {column: read(column, _label) for column in OPTIONAL if column not in ("load_kg", "note")}
    conditions = Conditions(**texts, load_kg=read("load_kg", _load), note=read("note", _note))
    ticks = path.parent / cell["ticks_file"]
    if cell["ticks_file"] and not ticks.is_file():
        detail = f"names {cell['ticks_file']!r}, which is no file here: name it relative to the manifest's folder"
        errors.append(FieldError(f"{place} column ticks_file", detail))
    if len(errors) > before:
        return None
    return ManifestRow(number, cell["vehicle_id"], cell["run_key"], started_at, ticks, closure, conditions)


def _metres(value_mm: float | None) -> float | None:
    return None if value_mm is None else value_mm / 1e3


def _radians(value_deg: float | None) -> float | None:
    return None if value_deg is None else math.radians(value_deg)


def _time(_column: str, text: str) -> datetime:
    return parse_time(text)


def _number(column: str, text: str) -> float:
    if not _NUMBER.fullmatch(text) or not math.isfinite(float(text)):
        remedy = (
            "write a point for the decimals" if re.fullmatch(r"[+-]?[0-9]+,[0-9]+", text) else "write it such as -12.5"
        )
        raise ValueError(f"{text[:40]!r} is no finite number: {remedy}, or leave the cell empty if it is not known")
    largest = _LARGEST.get(column, 1e9)
    if abs(float(text)) > largest:
        raise ValueError(f"{text[:40]} is beyond {largest:g}: check the unit")
    return float(text)


def _load(column: str, text: str) -> float:
    load = _number(column, text)
    if load < 0.0:
        raise ValueError("must not be negative")
    return load


def _turns(_column: str, text: str) -> int:
    if not re.fullmatch(r"[+-]?[0-9]{1,9}", text) or abs(int(text)) > 100_000:
        raise ValueError(f"{text[:40]!r} is no number of whole turns: write it such as -3, or leave the cell empty")
    return int(text)


def _label(_column: str, text: str) -> str:
    if len(text) > 200 or not text.isprintable():
        raise ValueError("must be one line of at most 200 characters")
    return text


def _note(_column: str, text: str) -> str:
    if len(text) > 10_000 or any(ord(letter) < 32 and letter not in "\t\r\n" for letter in text):
        raise ValueError("must be text of at most 10,000 characters without control characters")
    return text
