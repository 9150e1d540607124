"""Manifests: whole or not at all, and every wrong cell by its name."""

from __future__ import annotations

import gzip
import math
from pathlib import Path

import numpy as np
import pytest

from registry.domain.person import Actor
from registry.domain.vehicle import VehicleVersion
from registry.errors import Invalid, NotAllowed, Refusal, TooLarge
from registry.procedures import manifest
from registry.procedures.manifest import load_manifest
from registry.services import Services
from registry.storage import runs as stored

COLUMNS = (
    "vehicle_id,run_key,started_at,ticks_file,x_mm,y_mm,heading_deg,distance_mm,turns,position_sd_mm,heading_sd_deg,"
    "start_mark,end_mark,course,surface,load_kg,driven_by,read_by,instrument,note"
)
ROW = {
    "vehicle_id": "tub-7",
    "run_key": "r1",
    "started_at": "2026-03-01T10:00:00+01:00",
    "ticks_file": "r1.csv",
    "distance_mm": "3490",
    "position_sd_mm": "5",
}


def ticks(folder: Path, name: str = "r1.csv", samples: int = 200, step: int = 50) -> Path:
    """A straight drive of 0.349 mm a tick: 200 samples are 3.47 m in 19.9 s."""
    path = folder / name
    rows = "".join(f"{i * 0.1:.1f},{i * step},{i * step}\n" for i in range(samples))
    content = f"time_s,left_counts,right_counts\n{rows}".encode()
    path.write_bytes(gzip.compress(content) if name.endswith(".gz") else content)
    return path


def written(folder: Path, *rows: dict[str, str], columns: str = COLUMNS) -> Path:
    path = folder / "runs.csv"
    names = columns.split(",")
    lines = [columns, *(",".join((ROW | row).get(name, "") for name in names) for row in rows)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def count_of_runs(services: Services) -> int:
    with services.read() as c:
        return len(stored.page(c, "tub-7", 1000, None).items)


@pytest.fixture
def refused(services: Services, vehicle: VehicleVersion, local: Actor, tmp_path: Path):
    """Loads a manifest that is to be refused, and makes sure that nothing was recorded."""

    def load(path: Path, kind: type[Refusal] = Invalid) -> dict[str, str]:
        with pytest.raises(kind) as caught:
            load_manifest(services, local, path)
        assert count_of_runs(services) == 0
        return {error.pointer: error.detail for error in caught.value.errors}

    return load


def test_runs_are_recorded_with_all_that_their_rows_say(services, vehicle, local, tmp_path: Path):
    ticks(tmp_path)
    (tmp_path / "logs").mkdir()
    ticks(tmp_path, "logs/r2.csv.gz")
    second = {
        "run_key": "r2", "ticks_file": "logs/r2.csv.gz", "started_at": "2026-03-01T11:00:00Z", "x_mm": "3466.5",
        "y_mm": "-12", "heading_deg": "-1.5", "distance_mm": "", "turns": "0", "heading_sd_deg": "0.2",
        "start_mark": "A", "end_mark": "B", "course": "hall", "surface": "concrete", "load_kg": "120.5",
        "driven_by": "Tove", "read_by": "Kim", "instrument": "tape 3", "note": '"wet, cold"',
    }  # fmt: skip
    loaded = load_manifest(services, local, written(tmp_path, {}, second))
    assert [(one.row, one.created, one.run.use) for one in loaded] == [(2, True, "usable"), (3, True, "usable")]
    run = loaded[1].run
    assert (run.run_key, run.samples, run.recorded_by) == ("r2", 200, "local:console")
    assert run.closure.x_m == pytest.approx(3.4665)
    assert run.closure.heading_rad == pytest.approx(math.radians(-1.5))
    assert (run.closure.distance_m, run.closure.turns) == (None, 0)
    assert (run.conditions.load_kg, run.conditions.note, run.conditions.end_mark) == (120.5, "wet, cold", "B")
    assert loaded[0].run.started_at.hour == 9
    with services.read() as c:
        assert stored.counts(c, run.run_id).left.tolist() == (np.arange(200) * 50).tolist()


def test_loading_again_records_nothing_twice(services, vehicle, local, tmp_path: Path):
    ticks(tmp_path)
    path = written(tmp_path, {})
    first = load_manifest(services, local, path)
    (tmp_path / "r1.csv").write_bytes(gzip.compress((tmp_path / "r1.csv").read_bytes()))
    again = load_manifest(services, local, written(tmp_path, {"started_at": "2026-03-01T09:00:00Z"}))
    assert [(one.created, one.run.run_id) for one in again] == [(False, first[0].run.run_id)]
    assert count_of_runs(services) == 1


def test_the_same_key_with_other_content_is_refused_and_nothing_else_is_recorded(
    services, vehicle, local, tmp_path: Path
):
    ticks(tmp_path)
    load_manifest(services, local, written(tmp_path, {}))
    with pytest.raises(Invalid) as caught:
        load_manifest(services, local, written(tmp_path, {"run_key": "new"}, {"note": "edited"}))
    assert [error.pointer for error in caught.value.errors] == ["runs.csv row 3 column run_key"]
    assert count_of_runs(services) == 1


def test_one_key_twice_in_a_manifest_is_refused_only_when_the_rows_differ(services, vehicle, local, tmp_path: Path):
    ticks(tmp_path)
    with pytest.raises(Invalid, match="'r1' stands in row 2 with other content"):
        load_manifest(services, local, written(tmp_path, {}, {"note": "b"}))
    assert count_of_runs(services) == 0
    loaded = load_manifest(services, local, written(tmp_path, {}, {}))
    assert [one.created for one in loaded] == [True, False]


def test_a_well_formed_run_that_is_unusable_is_kept_set_aside(services, vehicle, local, tmp_path: Path):
    ticks(tmp_path, step=0)
    ticks(tmp_path, "fast.csv", step=5_000)
    fast = {"run_key": "r2", "ticks_file": "fast.csv", "started_at": "2026-03-01T12:00:00Z"}
    loaded = load_manifest(services, local, written(tmp_path, {}, fast))
    assert [one.run.use for one in loaded] == ["set aside"] * 2
    assert "no motion" in loaded[0].run.reasons[0]
    assert "impossible speed" in loaded[1].run.reasons[0]


@pytest.mark.parametrize(
    ("row", "place", "remedy"),
    [
        ({"vehicle_id": ""}, "runs.csv row 3 column vehicle_id", "is empty: it is needed"),
        ({"vehicle_id": "tub-8"}, "runs.csv row 3 column vehicle_id", "tub-8"),
        ({"run_key": ""}, "runs.csv row 3 column run_key", "is empty"),
        ({"run_key": "k" * 201}, "runs.csv row 3 column run_key", "1 to 200 characters"),
        ({"run_key": "a\x07b"}, "runs.csv row 3 column run_key", "without control characters"),
        ({"started_at": "2026-03-01 10:00"}, "runs.csv row 3 column started_at", "a time with a zone"),
        ({"started_at": "2026-03-01T10:00:00"}, "runs.csv row 3 column started_at", "such as 2026-03-01T08:30:00Z"),
        ({"started_at": "2026-02-30T10:00:00Z"}, "runs.csv row 3 column started_at", "is no date"),
        ({"started_at": "2026-04-01T10:00:00Z"}, "runs.csv row 3 column started_at", "in the future"),
        ({"ticks_file": "nowhere.csv"}, "runs.csv row 3 column ticks_file", "is no file here"),
        ({"ticks_file": "."}, "runs.csv row 3 column ticks_file", "is no file here"),
        ({"ticks_file": "one.csv"}, "one.csv column time_s", "at least 2 samples"),
        ({"ticks_file": "back.csv"}, "back.csv row 4 column time_s", "later than the sample before"),
        ({"ticks_file": "minus.csv"}, "minus.csv row 3 column left_counts", "is not a reading of a 32-bit counter"),
        ({"ticks_file": "words.csv"}, "words.csv row 2 column left_counts", "no whole counter reading"),
        ({"ticks_file": "semicolons.csv"}, "semicolons.csv row 1", "save the file with commas"),
        ({"x_mm": "12m"}, "runs.csv row 3 column x_mm", "'12m' is no finite number"),
        ({"x_mm": '"12,5"'}, "runs.csv row 3 column x_mm", "write a point for the decimals"),
        ({"y_mm": "nan"}, "runs.csv row 3 column y_mm", "is no finite number"),
        ({"y_mm": "1e999"}, "runs.csv row 3 column y_mm", "is no finite number"),
        ({"x_mm": "1e12"}, "runs.csv row 3 column x_mm", "check the unit"),
        ({"heading_deg": "270", "heading_sd_deg": "1"}, "runs.csv row 3 column heading_deg", "whole turns in turns"),
        ({"heading_deg": "1"}, "runs.csv row 3 column heading_sd_deg", "standard uncertainty"),
        ({"turns": "1.5"}, "runs.csv row 3 column turns", "is no number of whole turns"),
        ({"turns": "9" * 30}, "runs.csv row 3 column turns", "is no number of whole turns"),
        ({"distance_mm": "-1"}, "runs.csv row 3 column distance_mm", "must not be negative"),
        ({"distance_mm": "", "turns": "3"}, "runs.csv row 3", "at least one of"),
        ({"position_sd_mm": "0"}, "runs.csv row 3 column position_sd_mm", "above 0"),
        ({"position_sd_mm": ""}, "runs.csv row 3 column position_sd_mm", "standard uncertainty"),
        ({"load_kg": "-3"}, "runs.csv row 3 column load_kg", "must not be negative"),
        ({"surface": "s" * 201}, "runs.csv row 3 column surface", "at most 200 characters"),
        ({"note": "n" * 10_001}, "runs.csv row 3 column note", "at most 10,000 characters"),
        ({"note": "a, b"}, "runs.csv row 3", "has 21 cells where the header has 20 columns"),
        ({"note": '"open'}, "runs.csv line 3", "is no row of a CSV file"),
    ],
)  # fmt: skip
def test_a_wrong_cell_is_named_and_the_good_row_above_it_is_not_recorded(
    refused, tmp_path: Path, row: dict[str, str], place: str, remedy: str
):
    ticks(tmp_path)
    ticks(tmp_path, "one.csv", samples=1)
    head = "time_s,left_counts,right_counts\n"
    for name, content in (
        ("back.csv", "0,1,1\n2,2,2\n1,3,3\n"),
        ("minus.csv", "0,1,1\n1,-2,2\n2,3,3\n"),
        ("words.csv", "0,one,1\n1,2,2\n"),
    ):
        (tmp_path / name).write_text(head + content)
    (tmp_path / "semicolons.csv").write_text("time_s;left_counts;right_counts\n0;1;1\n")
    errors = refused(written(tmp_path, {}, {"run_key": "r2", "started_at": "2026-03-01T12:00:00Z"} | row))
    assert place in errors, errors
    assert remedy in errors[place]


@pytest.mark.parametrize(
    ("content", "place", "remedy"),
    [
        (b"", "runs.csv row 1", "begin with the header vehicle_id,run_key"),
        (COLUMNS.encode(), "runs.csv row 2", "name one run a row"),
        (COLUMNS.replace(",", ";").encode(), "runs.csv row 1", "separated by semicolons"),
        (COLUMNS.replace(",turns", "").encode(), "runs.csv row 1", "has no column turns: add it"),
        ((COLUMNS + ",weather").encode(), "runs.csv row 1 column 'weather'", "is unknown: the columns are"),
        ((COLUMNS + ",note").encode(), "runs.csv row 1", "names note twice"),
        (COLUMNS.encode("utf-16"), "runs.csv", "is UTF-16 text"),
        (COLUMNS.encode() + b"\ntub-7,\xe9", "runs.csv row 2", "not UTF-8"),
    ],
)
def test_a_manifest_of_another_form_is_refused(refused, tmp_path: Path, content: bytes, place: str, remedy: str):
    path = tmp_path / "runs.csv"
    path.write_bytes(content)
    errors = refused(path)
    assert remedy in errors[place], errors


def test_a_missing_manifest_is_refused(refused, tmp_path: Path):
    assert refused(tmp_path / "none.csv") == {"none.csv": "cannot be read (No such file or directory)"}


def test_a_byte_order_mark_crlf_blank_rows_and_another_order_of_columns_are_taken(
    services, vehicle, local, tmp_path: Path
):
    ticks(tmp_path)
    needed = COLUMNS.rsplit(",", 9)[0]
    path = written(tmp_path, {}, columns=",".join(reversed(needed.split(","))))
    path.write_bytes(b"\xef\xbb\xbf" + path.read_bytes().replace(b"\n", b"\r\n") + b"\r\n\r\n")
    assert len(load_manifest(services, local, path)) == 1


def test_all_wrong_cells_of_all_rows_are_named_together(refused, tmp_path: Path):
    ticks(tmp_path)
    errors = refused(written(tmp_path, {"x_mm": "a", "y_mm": "b"}, {"turns": "c"}))
    assert list(errors) == ["runs.csv row 2 column x_mm", "runs.csv row 2 column y_mm", "runs.csv row 3 column turns"]


def test_too_large_a_manifest_and_too_long_a_log_are_refused(refused, tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    (tmp_path / "runs.csv").write_bytes(b"x" * 16_000_001)
    refused(tmp_path / "runs.csv", TooLarge)
    monkeypatch.setattr("registry.procedures.tick_log.MAX_SAMPLES", 100)  # The same road, sooner at its end.
    ticks(tmp_path)
    assert "more than 100 samples" in refused(written(tmp_path, {}))["runs.csv row 2"]


def test_a_log_that_changes_while_the_manifest_is_loaded_is_noticed(services, vehicle, local, tmp_path: Path):
    ticks(tmp_path)

    def change(share: float, _what: str) -> None:
        if share == 0.5:
            ticks(tmp_path, samples=210)

    with pytest.raises(Refusal, match="changed while it was being loaded"):
        load_manifest(services, local, written(tmp_path, {}), change)
    assert count_of_runs(services) == 0


def test_progress_is_told_from_nothing_to_all(services, vehicle, local, tmp_path: Path):
    ticks(tmp_path)
    told: list[float] = []
    load_manifest(services, local, written(tmp_path, {}), lambda share, _what: told.append(share))
    assert told == [0.0, 0.5, 1.0]


def test_a_reader_may_not_load_runs_and_a_vehicle_only_its_own(services, vehicle, reader, tmp_path: Path):
    ticks(tmp_path)
    path = written(tmp_path, {})
    for actor in (reader, Actor("vehicle", "tub-8")):
        with pytest.raises(NotAllowed):
            load_manifest(services, actor, path)
    assert manifest.load_manifest(services, Actor("vehicle", "tub-7"), path)[0].created
