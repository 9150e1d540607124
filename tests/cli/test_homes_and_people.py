"""Homes that are fresh, missing, old or broken; who may do what; statements of vehicles."""

from __future__ import annotations

import json
import sqlite3
import stat
import subprocess
import sys
from contextlib import closing
from pathlib import Path
from typing import Any

import click
import pytest

from registry.cli import main
from tests.cli.conftest import TUG, Commands


def every_command(
    group: click.Group = main, before: tuple[str, ...] = ()
) -> list[tuple[tuple[str, ...], click.Command]]:
    found: list[tuple[tuple[str, ...], click.Command]] = []
    context = click.Context(group)
    for name in group.list_commands(context):
        command = group.get_command(context, name)
        assert command is not None
        path = (*before, name)
        found += every_command(command, path) if isinstance(command, click.Group) else [(path, command)]
    return found


COMMANDS = every_command()


def test_the_commands_are_those_of_the_manual():
    assert {" ".join(path) for path, _ in COMMANDS} == {
        "demo", "migrate", "serve", "worker", "person add", "key issue", "vehicle add", "runs load", "baseline",
        "adopt", "withdraw", "evaluate", "alerts", "history", "parameters", "check", "backup",
    }  # fmt: skip


@pytest.mark.parametrize(("path", "command"), COMMANDS, ids=[" ".join(path) for path, _ in COMMANDS])
def test_every_command_takes_home_and_json_and_says_what_it_does(path: tuple[str, ...], command: click.Command):
    options = {option for parameter in command.params for option in parameter.opts}
    assert {"--home", "--json"} <= options
    assert command.help
    assert command.help[0].isupper()


def test_unknown_commands_and_options_are_wrong_usage(rollbook: Commands):
    assert rollbook("fly").exit_code == 2
    assert rollbook("alerts", "--loud").exit_code == 2
    assert rollbook("adopt", "x").exit_code == 2
    assert not rollbook.home.exists()


def test_migrate_makes_a_home_and_may_be_repeated(rollbook: Commands):
    first = rollbook.json("migrate")
    assert first["home"] == str(rollbook.home)
    assert rollbook.json("migrate") == first
    assert stat.S_IMODE((rollbook.home / "secret_key").stat().st_mode) == 0o600


@pytest.mark.parametrize(
    "arguments", [("alerts",), ("check",), ("history", "x"), ("parameters", "x"), ("evaluate",), ("baseline", "x"),
                  ("backup", "copy.db"), ("key", "issue", "--vehicle", "x")],
)  # fmt: skip
def test_a_mistyped_home_is_refused_and_nothing_is_made_there(rollbook: Commands, arguments: tuple[str, ...]):
    assert "there is no home at" in rollbook.refused(*arguments)
    assert not rollbook.home.exists()
    rollbook.home.mkdir()
    assert "run 'rollbook migrate'" in rollbook.refused(*arguments)
    assert list(rollbook.home.iterdir()) == []


def test_registering_the_first_vehicle_or_person_makes_the_home(rollbook: Commands):
    assert rollbook("vehicle", "add", rollbook.write("a.json", TUG)).exit_code == 0
    other = rollbook.folder / "other"
    done = rollbook("person", "add", "Ada", "--role", "keeper", "--password-stdin", stdin="a long password", home=other)
    assert done.exit_code == 0
    assert (other / "rollbook.db").exists()


def test_the_home_may_come_from_the_environment(rollbook: Commands, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setenv("ROLLBOOK_HOME", str(rollbook.home))
    rollbook.json("migrate")
    assert rollbook("alerts").exit_code == 0


def test_a_database_of_another_revision_is_refused_with_the_way_out(rollbook: Commands):
    rollbook.json("migrate")
    with closing(sqlite3.connect(rollbook.home / "rollbook.db")) as c, c:
        c.execute("UPDATE alembic_version SET version_num = '0000'")
    for arguments in (("alerts",), ("vehicle", "add", rollbook.write("a.json", TUG)), ("serve", "--port", 0)):
        assert "run 'rollbook migrate'" in rollbook.refused(*arguments)


def test_a_file_that_is_no_database_is_refused(rollbook: Commands):
    rollbook.home.mkdir()
    (rollbook.home / "rollbook.db").write_bytes(b"this is not a database, but long enough to look like one" * 100)
    assert "the database cannot be used" in rollbook.refused("alerts")


def test_a_home_in_the_way_of_a_file_is_refused(rollbook: Commands):
    rollbook.write("home", "a file")
    assert "cannot be used" in rollbook.refused("migrate")


@pytest.mark.parametrize("name", ["ROLLBOOK_EVALUATE_EVERY", "ROLLBOOK_WINDOW_RUNS", "ROLLBOOK_SILENCE_DAYS"])
def test_a_setting_that_cannot_be_read_is_named(rollbook: Commands, monkeypatch: pytest.MonkeyPatch, name: str):
    monkeypatch.setenv(name, "often")
    assert name in rollbook.refused("migrate")


def test_a_vehicles_id_comes_from_the_option_else_the_file_else_its_name(rollbook: Commands):
    assert rollbook.json("vehicle", "add", rollbook.write("tug-1.json", TUG))["vehicle_id"] == "tug-1"
    file = rollbook.write("x.json", TUG | {"vehicle_id": "tug-2"})
    assert rollbook.json("vehicle", "add", file)["vehicle_id"] == "tug-2"
    assert rollbook.json("vehicle", "add", file, "--id", "tug-3")["vehicle_id"] == "tug-3"


def test_a_vehicle_stated_again_changes_nothing_and_otherwise_only_on_purpose(rollbook: Commands, tug: str):
    same = rollbook.json("vehicle", "add", rollbook.write("tug-1.json", TUG))
    assert (same["created"], same["version"]) == (False, 1)
    other = rollbook.write("tug-1.json", TUG | {"serial": "T-1"})
    assert "tug-1" in rollbook.refused("vehicle", "add", other)
    changed = rollbook.json("vehicle", "add", other, "--change")
    assert (changed["version"], changed["serial"]) == (2, "T-1")


@pytest.mark.parametrize(
    ("content", "said"),
    [
        ("", "the body is empty"),
        ("[]", "must be a JSON object"),
        ("{", "is not JSON"),
        ('{"name": "a", "name": "b"}', "given twice"),
        ('{"max_speed_mm_per_s": NaN}', "NaN is not a JSON number"),
        ("[" * 100_000, "nested too deeply"),
        (b"\xff\xfe", "not UTF-8"),
        ({}, "name: is missing"),
        (TUG | {"colour": "red"}, "colour is not a field"),
        (TUG | {"drive": "legs"}, "drive"),
        (TUG | {"max_speed_mm_per_s": 0}, "max_speed_mm_per_s"),
        (TUG | {"max_speed_mm_per_s": 10**400}, "max_speed_mm_per_s"),
        (TUG | {"nominal": {"left_mm_per_tick": 0.3, "right_mm_per_tick": 0.3}}, "nominal/width_mm"),
        (TUG | {"counter_bits": 4}, "counter_bits"),
        (TUG | {"vehicle_id": "a/b"}, "vehicle_id"),
        (TUG | {"vehicle_id": 7}, "vehicle_id"),
    ],
)
def test_a_statement_that_cannot_be_is_refused_and_makes_no_home(rollbook: Commands, content: Any, said: str):
    assert said in rollbook.refused("vehicle", "add", rollbook.write("tug.json", content))
    assert not rollbook.home.exists()


def test_a_statement_with_a_byte_order_mark_is_read(rollbook: Commands):
    assert (
        rollbook("vehicle", "add", rollbook.write("tug.json", b"\xef\xbb\xbf" + json.dumps(TUG).encode())).exit_code
        == 0
    )


def test_a_missing_statement_or_a_folder_in_its_place_is_refused(rollbook: Commands):
    assert "cannot be read (No such file" in rollbook.refused("vehicle", "add", "nowhere.json")
    assert "cannot be read (Is a directory" in rollbook.refused("vehicle", "add", rollbook.folder)
    rollbook.json("migrate")
    assert "cannot be read (No such file" in rollbook.refused("runs", "load", "nowhere.csv")


def test_a_key_is_alone_on_standard_output_and_kept_as_a_hash_only(rollbook: Commands, tug: str):
    done = rollbook("key", "issue", "--vehicle", tug)
    key = done.stdout.removesuffix("\n")
    assert "\n" not in key
    assert done.stderr == ""
    rollbook("check")
    assert all(key.encode() not in path.read_bytes() for path in rollbook.home.iterdir())
    assert rollbook.json("key", "issue", "--vehicle", tug)["key"] != key


@pytest.mark.parametrize("arguments", [(), ("--person", "Ada", "--vehicle", "tug-1")])
def test_a_key_has_one_owner(rollbook: Commands, tug: str, arguments: tuple[str, ...]):
    assert rollbook("key", "issue", *arguments).exit_code == 2


@pytest.mark.parametrize("password", ["", "short", "\n"])
def test_a_password_that_is_too_short_is_refused(rollbook: Commands, password: str):
    said = rollbook.refused("person", "add", "Ada", "--role", "reader", "--password-stdin", stdin=password)
    assert "password must have" in said


def test_a_password_is_asked_for_only_on_a_terminal(rollbook: Commands):
    done = rollbook("person", "add", "Ada", "--role", "reader", stdin="a long password\na long password\n")
    assert done.exit_code == 2
    assert "--password-stdin" in done.stderr


def test_people_are_added_once_and_with_a_known_role(rollbook: Commands):
    arguments = ("person", "add", "Ada", "--password-stdin", "--role")
    assert rollbook(*arguments, "captain", stdin="a long password").exit_code == 2
    assert rollbook.json(*arguments, "reader", stdin="a long password") == {"name": "Ada", "role": "reader"}
    assert "Ada" in rollbook.refused(*arguments, "reader", stdin="a long password")


def test_a_key_in_the_environment_acts_as_its_person(rollbook: Commands, tug: str, driven: Path):
    reader, technician, approver = (rollbook.person(role, role) for role in ("reader", "technician", "approver"))
    rollbook.environment["ROLLBOOK_KEY"] = reader
    assert rollbook("alerts").exit_code == 0
    assert "needs the role technician" in rollbook.refused("runs", "load", driven)
    assert "needs the role technician" in rollbook.refused("evaluate")
    assert "needs the role approver" in rollbook.refused("vehicle", "add", rollbook.write("b.json", TUG))
    rollbook.environment["ROLLBOOK_KEY"] = technician
    assert {run["recorded_by"] for run in rollbook.json("runs", "load", driven)["items"]} == {"technician"}
    proposed = rollbook.json("baseline", tug)["calibration_id"]
    assert "needs the role approver" in rollbook.refused("adopt", proposed, "--reason", "x")
    assert "needs the role keeper" in rollbook.refused("key", "issue", "--vehicle", tug)
    rollbook.environment["ROLLBOOK_KEY"] = approver
    assert rollbook("adopt", proposed, "--reason", "x").exit_code == 0


def test_a_vehicles_key_loads_its_own_runs_and_reads_its_own_parameters(rollbook: Commands, tug: str, driven: Path):
    rollbook("vehicle", "add", rollbook.write("tug-2.json", TUG))
    key = rollbook("key", "issue", "--vehicle", tug).stdout.strip()
    other = rollbook("key", "issue", "--vehicle", "tug-2").stdout.strip()
    rollbook.environment["ROLLBOOK_KEY"] = other
    assert "may not act for 'tug-1'" in rollbook.refused("runs", "load", driven)
    rollbook.environment["ROLLBOOK_KEY"] = key
    assert rollbook.json("runs", "load", driven)["recorded"] == 6
    for arguments in (("alerts",), ("history", tug)):
        assert "needs the role reader" in rollbook.refused(*arguments)


def test_an_invalid_key_is_refused_and_never_shown(rollbook: Commands, tug: str):
    rollbook.environment["ROLLBOOK_KEY"] = "made-up-key"
    said = rollbook.refused("alerts")
    assert "ROLLBOOK_KEY is no valid key here" in said
    assert "made-up-key" not in said


def test_the_local_account_leaves_putting_into_force_to_an_approver_once_there_is_one(
    rollbook: Commands, tug: str, driven: Path
):
    rollbook("runs", "load", driven)
    first = rollbook.json("baseline", tug)["calibration_id"]
    rollbook.person("Tove", "technician")
    assert rollbook("adopt", first, "--reason", "nobody else could").exit_code == 0
    rollbook.person("Abel", "approver")
    second = rollbook.json("baseline", tug)["calibration_id"]
    assert "ROLLBOOK_KEY" in rollbook.refused("adopt", second, "--reason", "x")
    assert "ROLLBOOK_KEY" in rollbook.refused("withdraw", first, "--reason", "x")
    assert rollbook("vehicle", "add", rollbook.write("tug-2.json", TUG)).exit_code == 0


def test_check_says_that_nothing_is_wrong_and_finds_what_is(rollbook: Commands, tug: str, driven: Path):
    rollbook("runs", "load", driven)
    assert rollbook.json("check") == {"findings": []}
    with closing(sqlite3.connect(rollbook.home / "rollbook.db")) as c, c:
        c.execute("DROP TRIGGER IF EXISTS journal_no_update")
        for (name,) in c.execute("SELECT name FROM sqlite_master WHERE type = 'trigger'").fetchall():
            c.execute(f'DROP TRIGGER "{name}"')
        c.execute("UPDATE journal SET what = '{}' WHERE rowid = 2")
    done = rollbook("check", "--json")
    assert done.exit_code == 1
    findings = json.loads(done.stdout)["findings"]
    assert findings
    assert rollbook("check").stdout.splitlines() == findings


def test_a_backup_is_a_whole_copy_and_never_overwrites(rollbook: Commands, tug: str):
    copy = rollbook.folder / "kept" / "rollbook.db"
    copy.parent.mkdir()
    assert rollbook.json("backup", copy)["bytes"] == copy.stat().st_size
    assert rollbook("history", tug, home=copy.parent).exit_code == 0
    assert "already: name another" in rollbook.refused("backup", copy)
    assert "cannot" in rollbook.refused("backup", rollbook.folder / "nowhere" / "copy.db")


def test_a_home_that_may_not_be_written_is_refused(rollbook: Commands):
    rollbook.home.mkdir(0o755)
    program = (
        "import os, sys; from registry.cli import main; import registry.commands.keeping\n"
        "os.chdir(sys.argv[1]); os.geteuid() == 0 and os.setuid(65534); main(['migrate', '--home', '.'])"
    )
    done = subprocess.run([sys.executable, "-c", program, rollbook.home], capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert done.stderr.endswith("cannot be used (Permission denied)\n")
    assert list(rollbook.home.iterdir()) == []
