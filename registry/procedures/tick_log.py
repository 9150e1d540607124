"""Read a tick log: CSV with the header ``time_s,left_counts,right_counts``, plain or gzipped.

The file is read in blocks. Each block goes through numpy's own text reader, which is strict and quick; where that
refuses or finds something that is not finite, the same block is read once more cell by cell, to name row, column and
remedy. Nothing longer than a block is ever held as text: an hour at 200 Hz costs its 17 MB of numbers and little else.
"""

from __future__ import annotations

import csv
import gzip
import re
import zlib
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import BinaryIO

import numpy as np
import numpy.typing as npt

from registry.errors import FieldError, Invalid, TooLarge

COLUMNS = ("time_s", "left_counts", "right_counts")
MAX_SAMPLES = 2_000_000
MAX_UNPACKED_BYTES = 256_000_000
#: Each is remembered, to name rows as the file has them.
MAX_BLANK_ROWS = 10_000
#: Errors named of one file; the rest are most often the same mistake.
MAX_ERRORS = 10

_MAX_LINE_BYTES = 10_000
_BLOCK_BYTES = 1 << 20
_GZIP_MAGIC = b"\x1f\x8b"
_NUMBER = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?")
_WHOLE = re.compile(r"[+-]?[0-9]+(\.0*)?")
_WIDE = re.compile(r"(nan|[+-]?inf(inity)?)", re.IGNORECASE)

Float = npt.NDArray[np.float64]
Int = npt.NDArray[np.int64]


@dataclass(frozen=True)
class TickLog:
    """A log as it stands in its file: sample times in seconds and counter readings, each of shape (n,).

    ``blank_rows`` are rows of the file without content; they are skipped, and counted when a row is named.
    """

    time_s: Float
    left_counts: Int
    right_counts: Int
    blank_rows: tuple[int, ...] = ()

    def row_of(self, sample: int) -> int:
        """The row of the file, header 1, that holds a sample, counted from 0."""
        row = sample + 2
        for blank in self.blank_rows:
            if blank > row:
                break
            row += 1
        return row


@dataclass
class _Collected:
    """What the blocks gave so far."""

    times: list[Float] = field(default_factory=list)
    left: list[Int] = field(default_factory=list)
    right: list[Int] = field(default_factory=list)
    blank_rows: list[int] = field(default_factory=list)
    samples: int = 0

    def add(self, times: Float, left: Int, right: Int, name: str) -> None:
        self.times.append(times)
        self.left.append(left)
        self.right.append(right)
        self.samples += int(times.size)
        if self.samples > MAX_SAMPLES:
            raise TooLarge(f"{name} has more than {MAX_SAMPLES:,} samples: cut it into shorter runs")

    def log(self) -> TickLog:
        empty: Float = np.empty(0)
        nothing: Int = np.empty(0, np.int64)
        return TickLog(
            np.concatenate(self.times or [empty]),
            np.concatenate(self.left or [nothing]),
            np.concatenate(self.right or [nothing]),
            tuple(self.blank_rows),
        )


def read_tick_log(path: Path) -> TickLog:
    """
    Read a tick log.

    Parameters
    ----------
    path
        Plain or gzipped, told by its content and not by its name.

    Returns
    -------
    TickLog
        Every cell was a number; whether times rise and readings fit the counter is judged with the run.

    Raises
    ------
    Invalid
        The file cannot be read as a tick log; each error names row, column and remedy.
    TooLarge
        More than `MAX_SAMPLES` samples or `MAX_UNPACKED_BYTES` bytes; the rest is not read.
    """
    name = path.name
    collected = _Collected()
    with _opened(path) as stream:
        blocks = _blocks(stream, name)
        lines = next(blocks, [])
        columns = _header(lines[0] if lines else "", name)
        row = 2
        lines = lines[1:]
        while True:
            _take(lines, row, columns, collected, name)
            row += len(lines)
            following = next(blocks, None)
            if following is None:
                return collected.log()
            lines = following


@contextmanager
def _opened(path: Path) -> Iterator[BinaryIO]:
    """The file's bytes, unpacked where they are gzip."""
    try:
        with path.open("rb") as raw:
            packed = raw.peek(2)[:2] == _GZIP_MAGIC
            if not packed:
                yield raw
                return
            with gzip.GzipFile(fileobj=raw) as unpacked:
                yield unpacked  # type: ignore[misc]  # reads like any binary file
    except (EOFError, gzip.BadGzipFile, zlib.error) as error:
        raise _wrong(path.name, f"is not whole as a gzip file ({error}): copy or pack it again") from error
    except OSError as error:
        raise _wrong(path.name, f"cannot be read ({error.strerror or error})") from error


def _wrong(name: str, detail: str) -> Invalid:
    return Invalid(f"{name} {detail}", (FieldError(name, detail),))


def _blocks(stream: BinaryIO, name: str) -> Iterator[list[str]]:
    """The lines of the file, without their ends, about a megabyte at a time."""
    rest, total, row = b"", 0, 1
    while piece := stream.read(_BLOCK_BYTES):
        total += len(piece)
        if total > MAX_UNPACKED_BYTES:
            raise TooLarge(f"{name} holds more than {MAX_UNPACKED_BYTES // 1_000_000} MB: cut it into shorter runs")
        data = rest + piece
        cut = data.rfind(b"\n") + 1
        rest = data[cut:]
        if cut:
            lines = _decoded(data[:cut], name).split("\n")
            row += len(lines) - 1
            yield lines[:-1]
        if len(rest) > _MAX_LINE_BYTES:
            detail = "is longer than any row of a tick log: save the file as CSV with line feeds (LF or CRLF)"
            raise _wrong(f"{name} row {row}", detail)
    if rest:
        yield [_decoded(rest, name)]


def _decoded(data: bytes, name: str) -> str:
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise _wrong(name, "is UTF-16 text: save it as UTF-8")
    try:
        return data.replace(b"\r\n", b"\n").decode("utf-8")
    except UnicodeDecodeError as error:
        raise _wrong(name, f"is not text in UTF-8 ({error.reason}): save it as CSV in UTF-8") from error


def _header(line: str, name: str) -> tuple[str, ...]:
    """The columns in the order of the file."""
    line = line.removeprefix("\ufeff")
    place = f"{name} row 1"
    expected = ",".join(COLUMNS)
    if not line.strip():
        raise _wrong(place, f"is empty: begin with the header {expected}")
    for sign, said in ((";", "semicolons"), ("\t", "tabs")):
        if sign in line and "," not in line:
            raise _wrong(place, f"is separated by {said}: save the file with commas, and points in numbers")
    if "\r" in line:
        raise _wrong(place, "ends its lines by CR alone: save the file with line feeds (LF or CRLF)")
    columns = tuple(cell.strip().strip('"') for cell in line.split(","))
    errors = [FieldError(f"{place} column {c!r}", f"is unknown: the columns are {expected}")
              for c in columns if c not in COLUMNS]  # fmt: skip
    errors += [FieldError(place, f"has no column {c}: the header is {expected}") for c in COLUMNS if c not in columns]
    errors += [FieldError(place, f"names {c} twice: keep one") for c in COLUMNS if columns.count(c) > 1]
    if errors:
        raise Invalid(f"the header of {name} is not that of a tick log", tuple(errors[:MAX_ERRORS]))
    return columns


def _take(lines: list[str], first_row: int, columns: tuple[str, ...], collected: _Collected, name: str) -> None:
    blank = [index for index, line in enumerate(lines) if not line or line.isspace()]
    if blank:
        if len(collected.blank_rows) + len(blank) > MAX_BLANK_ROWS:
            raise TooLarge(f"{name} has more than {MAX_BLANK_ROWS:,} rows without content: remove them")
        collected.blank_rows.extend(first_row + index for index in blank)
    if len(blank) == len(lines):
        return
    table = _at_once(lines, columns)
    if table is None or table.size != len(lines) - len(blank) or not np.isfinite(table["time_s"]).all():
        collected.add(*_cell_by_cell(lines, first_row, columns, name), name)
        return
    # The columns are copied: views would keep the whole block in memory.
    collected.add(table["time_s"].copy(), table["left_counts"].copy(), table["right_counts"].copy(), name)


def _at_once(lines: list[str], columns: tuple[str, ...]) -> npt.NDArray[np.void] | None:
    """The block as a table, or None when the quick reader does not take every cell as it is."""
    kinds = [(column, np.float64 if column == "time_s" else np.int64) for column in columns]
    try:
        return np.loadtxt(lines, delimiter=",", comments=None, quotechar='"', dtype=kinds, ndmin=1)
    except ValueError:
        return None


def _cell_by_cell(lines: Sequence[str], first_row: int, columns: tuple[str, ...], name: str) -> tuple[Float, Int, Int]:
    read: dict[str, list[float | int]] = {column: [] for column in columns}
    errors: list[FieldError] = []
    for row, line in enumerate(lines, start=first_row):
        if not line.strip():
            continue
        place = f"{name} row {row}"
        try:
            cells = next(csv.reader([line], strict=True))
        except csv.Error as error:
            errors.append(FieldError(place, f"is no row of a CSV file ({error})"))
            cells = []
        else:
            if len(cells) != len(columns):
                errors.append(FieldError(place, f"has {len(cells)} cells where the header has {len(columns)} columns"))
                cells = []
        for column, cell in zip(columns, cells, strict=False):
            try:
                read[column].append(_seconds(cell) if column == "time_s" else _reading(cell))
            except ValueError as error:
                errors.append(FieldError(f"{place} column {column}", str(error)))
        if len(errors) >= MAX_ERRORS:
            break
    if errors:
        raise Invalid(f"{name} is not a tick log: {errors[0].pointer} {errors[0].detail}", tuple(errors[:MAX_ERRORS]))
    left, right = (np.array(read[column], np.int64) for column in COLUMNS[1:])
    return np.array(read["time_s"], np.float64), left, right


def _seconds(cell: str) -> float:
    text = cell.strip()
    if _WIDE.fullmatch(text) or (_NUMBER.fullmatch(text) and not np.isfinite(float(text))):
        raise ValueError(f"{text!r} must be a finite number of seconds")
    if not _NUMBER.fullmatch(text):
        raise ValueError(f"{text[:40]!r} is no number of seconds: write it such as 12.345")
    return float(text)


def _reading(cell: str) -> int:
    text = cell.strip()
    if len(text) > 40 or not _WHOLE.fullmatch(text):
        raise ValueError(f"{text[:40]!r} is no whole counter reading: write it such as 48211")
    reading = int(text.split(".")[0])
    if abs(reading) >= 1 << 63:
        raise ValueError(f"{text} is larger than any counter of 63 bits")
    return reading
