"""The whole line by command: register, load, baseline, adopt, evaluate, carry, withdraw."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path

import pytest

from tests.cli.conftest import LEFT_MM, RIGHT_MM, WIDTH_MM, Commands, straight, tick_log


def test_a_vehicle_goes_from_logged_runs_to_parameters_in_force(rollbook: Commands, tug: str, driven: Path):
    loaded = rollbook.json("runs", "load", driven)
    assert (loaded["recorded"], loaded["known"], loaded["set_aside"]) == (6, 0, 0)
    assert [run["row"] for run in loaded["items"]] == [2, 3, 4, 5, 6, 7]
    assert {run["use"] for run in loaded["items"]} == {"usable"}
    again = rollbook.json("runs", "load", driven)
    assert (again["recorded"], again["known"]) == (0, 6)
    assert [run["run_id"] for run in again["items"]] == [run["run_id"] for run in loaded["items"]]

    proposed = rollbook.json("baseline", tug, "--note", "first week")
    assert (proposed["standing"], proposed["number"], proposed["note"]) == ("proposed", 1, "first week")
    for name, true in (("left_mm_per_tick", LEFT_MM), ("right_mm_per_tick", RIGHT_MM), ("width_mm", WIDTH_MM)):
        estimate = proposed[name]
        # Four standard uncertainties: once in 16,000, and the readings' errors are fixed anyway.
        assert abs(estimate["value"] - true) < 4 * estimate["u"]
        assert estimate["u"] < 1e-3 * true

    adopted = rollbook.json("adopt", proposed["calibration_id"], "--reason", "agrees", "--number", "1")
    assert adopted["standing"] == "in force"
    key = rollbook("key", "issue", "--vehicle", tug).stdout.strip()
    lines = rollbook("parameters", tug).stdout_bytes
    fields = dict(line.split("=", 1) for line in lines.decode().splitlines())
    assert (fields["VEHICLE_ID"], fields["CALIBRATION_NUMBER"], fields["CONDITION"]) == (tug, "1", "good")
    assert hashlib.sha256(lines[: lines.index(b"CONDITION=")]).hexdigest() == fields["DIGEST"]
    sheet = rollbook.json("parameters", tug)
    assert (sheet["digest"], sheet["tag"]) == (fields["DIGEST"], fields["TAG"])
    assert len(key) >= 32

    told = rollbook.json("history", tug)
    assert [item["number"] for item in told["items"]] == [1]
    assert [entry["reason"] for entry in told["in_force"]] == ["agrees"]
    withdrawn = rollbook.json("withdraw", proposed["calibration_id"], "--reason", "a mark had moved")
    assert (withdrawn["calibration"]["standing"], withdrawn["in_force"]) == ("withdrawn", None)
    assert "put a calibration into force" in rollbook.refused("parameters", tug)


def test_the_same_line_reads_well_as_text(rollbook: Commands, tug: str, driven: Path):
    done = rollbook("runs", "load", driven)
    assert (done.stdout, done.stderr) == ("", "6 runs recorded, 0 were known, 0 of all are set aside.\n")
    done = rollbook("baseline", tug)
    assert done.stdout.startswith("calibration 1 of tug-1, from 6 runs\n  left         0.347")
    command = done.stderr.split("rollbook ")[1].split(" --reason")[0].split()
    done = rollbook(*command, "--reason", "agrees")
    assert done.stderr == "Calibration 1 is in force on tug-1.\n"
    done = rollbook("history", tug)
    assert "in force" in done.stdout
    assert command[1] in done.stdout
    second = rollbook.json("baseline", tug)["calibration_id"]
    assert rollbook("adopt", second, "--reason", "again").exit_code == 0
    done = rollbook("withdraw", second, "--reason", "no", "--reinstate", 1)
    assert done.stderr == "Calibration 2 is withdrawn; calibration 3 is in force on tug-1 now.\n"


def test_a_baseline_that_the_runs_do_not_determine_says_which_run_would_settle_it(
    rollbook: Commands, tug: str, driven: Path
):
    only_straights = driven.read_text().splitlines()[:4]
    rollbook("runs", "load", rollbook.write("straights.csv", "\n".join(only_straights) + "\n"))
    said = rollbook.refused("baseline", tug)
    assert "width" in said
    assert "turn on the spot" in said


def test_runs_that_cannot_be_used_are_recorded_and_said(rollbook: Commands, tug: str, driven: Path):
    rollbook.write("logs/straight0.csv", tick_log(straight(900_000)))
    done = rollbook("runs", "load", driven)
    assert done.exit_code == 0
    assert "6 runs recorded, 0 were known, 1 of all are set aside." in done.stderr
    assert "row 2 (straight0) is set aside: impossible speed" in done.stderr


def test_a_manifest_with_a_wrong_cell_records_nothing(rollbook: Commands, tug: str, driven: Path):
    driven.write_text(driven.read_text().replace("11999.1", "eleven"))
    said = rollbook.refused("runs", "load", driven)
    assert "runs.csv row 3 column x_mm" in said
    assert (
        rollbook.json("runs", "load", rollbook.write("one.csv", "\n".join(driven.read_text().splitlines()[:2])))[
            "recorded"
        ]
        == 1
    )


@pytest.mark.parametrize(
    ("content", "said"),
    [
        ("time_s;left_counts;right_counts\n0;1;1\n", "straight0.csv row 1 is separated by semicolons"),
        ("time_s,left_counts,right_counts\n0,1,1\n", "straight0.csv column time_s"),
        ("time_s,left_counts,right_counts\n0,1,1\n1,99999999999,1\n", "straight0.csv row 3 column left_counts"),
        (b"\x1f\x8bnot gzip", "straight0.csv is not whole as a gzip file"),
    ],
)
def test_a_log_that_cannot_be_read_is_named(rollbook: Commands, tug: str, driven: Path, content: str, said: str):
    rollbook.write("logs/straight0.csv", content)
    assert said in rollbook.refused("runs", "load", driven)


def test_a_pass_and_a_replay_answer_what_they_did(rollbook: Commands, tug: str, driven: Path):
    rollbook("runs", "load", driven)
    rollbook("adopt", rollbook.json("baseline", tug)["calibration_id"], "--reason", "agrees")
    (one,) = rollbook.json("evaluate")["passes"]
    assert (one["looked_at"], set(one)) == (1, {"as_of", "looked_at", "evaluated", "findings", "alerts_open"})
    replayed = rollbook.json(
        "evaluate", tug, "--from", "2026-03-01T00:00:00Z", "--to", "2026-03-04T00:00:00Z", "--every", "1d"
    )
    assert [outcome["as_of"] for outcome in replayed["passes"]] == [f"2026-03-0{day}T00:00:00Z" for day in (1, 2, 3, 4)]
    assert "One pass: 1 vehicles looked at" in rollbook("evaluate", "--as-of", "2026-03-01T01:00:00+01:00").stderr


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("--as-of", "9999-03-01T00:00:00Z"), "future"),
        (
            ("--from", "2026-03-02T00:00:00Z", "--to", "2026-03-01T00:00:00Z", "--every", "1d"),
            "must not be before from",
        ),
        (("--from", "2026-03-01T00:00:00Z", "--to", "9999-03-01T00:00:00Z", "--every", "1d"), "future"),
        (("nobody",), "nobody"),
    ],
)
def test_a_pass_that_cannot_be_is_refused(rollbook: Commands, tug: str, arguments: tuple[str, ...], said: str):
    assert said in rollbook.refused("evaluate", *arguments)


_SPAN = ("--from", "2026-03-01T00:00:00Z", "--to", "2026-03-02T00:00:00Z")


@pytest.mark.parametrize(
    ("arguments", "option", "said"),
    [
        (("--as-of", "x"), "--as-of", "must be a time with a zone"),
        (("--as-of", "2026-03-01"), "--as-of", "must be a time with a zone"),
        (("--as-of", "2026-03-01T00:00:00"), "--as-of", "must be a time with a zone"),
        (("--as-of", "2026-02-30T00:00:00Z"), "--as-of", "is no date or time of day"),
        ((*_SPAN, "--every", "daily"), "--every", "is no duration"),
        ((*_SPAN, "--every", "0d"), "--every", "is no duration"),
    ],
)
def test_a_malformed_option_is_wrong_usage(
    rollbook: Commands, tug: str, arguments: tuple[str, ...], option: str, said: str
):
    done = rollbook("evaluate", *arguments)
    assert (done.exit_code, done.stdout) == (2, "")
    assert f"Invalid value for {option}: " in done.stderr
    assert said in done.stderr


@pytest.mark.parametrize(
    "arguments",
    [
        ("--from", "2026-03-01T00:00:00Z"),
        ("--from", "2026-03-01T00:00:00Z", "--to", "2026-03-02T00:00:00Z"),
        ("--as-of", "2026-03-01T00:00:00Z", "--every", "1d"),
    ],
)
def test_half_a_replay_is_wrong_usage(rollbook: Commands, tug: str, arguments: tuple[str, ...]):
    done = rollbook("evaluate", *arguments)
    assert done.exit_code == 2
    assert "--from, --to and --every together" in done.stderr


def test_alerts_are_listed_as_the_api_writes_them(rollbook: Commands, tug: str, driven: Path):
    assert rollbook("alerts").stdout == "No alerts.\n"
    assert rollbook.json("alerts", "--open") == {"items": [], "after": None}
    rollbook("runs", "load", driven)
    rollbook("adopt", rollbook.json("baseline", tug)["calibration_id"], "--reason", "agrees")
    rollbook("evaluate")  # The last run is months old.
    (alert,) = rollbook.json("alerts", "--open")["items"]
    assert (alert["kind"], alert["vehicle_id"], alert["standing"]) == ("no_evidence", tug, "unacknowledged")
    assert alert["history"]
    assert "no recent run" in rollbook("alerts").stdout


def test_unknown_names_are_refused_with_one_sentence(rollbook: Commands, tug: str):
    for arguments in (
        ("baseline", "nobody"),
        ("history", "nobody"),
        ("parameters", "nobody"),
        ("adopt", "nothing", "--reason", "x"),
        ("withdraw", "nothing", "--reason", "x"),
        ("key", "issue", "--vehicle", "nobody"),
        ("key", "issue", "--person", "nobody"),
    ):
        assert rollbook.refused(*arguments).startswith("Refused: ")


def test_a_blank_reason_is_refused(rollbook: Commands, tug: str, driven: Path):
    rollbook("runs", "load", driven)
    proposed = rollbook.json("baseline", tug)["calibration_id"]
    assert "reason" in rollbook.refused("adopt", proposed, "--reason", " ")
    assert "number" in rollbook.refused("adopt", proposed, "--reason", "x", "--number", "7")
    assert json.loads(rollbook("history", tug, "--json").stdout)["items"][0]["standing"] == "proposed"
