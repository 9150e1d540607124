from __future__ import annotations

import sqlite3

import pytest

from registry.errors import Conflict, Unready
from registry.procedures import upkeep
from registry.services import make_services
from registry.settings import sqlite_url
from tests.conftest import services_in
from tests.storage.samples import add_runs, run_of


@pytest.fixture
def full(services, proposer, clock):
    proposer.adopt()
    with services.write() as c:
        add_runs(c, run_of("one", clock()), run_of("two", clock()))
    return services


def tamper(services, sql):
    with services.write() as c:
        c.exec_driver_sql(sql)
    return upkeep.check(services)


def test_a_whole_record_has_nothing_wrong_with_it(full):
    assert upkeep.check(full) == []


@pytest.mark.parametrize(
    ("sql", "finding"),
    [
        ("UPDATE journal SET what = '{}' WHERE entry = 1", "journal: entry 1 is not what was written"),
        ("UPDATE run_counts SET counts = x'00' WHERE run_id = 'two'", "the counts of run two are not those"),
        ("DELETE FROM run_counts WHERE run_id = 'one'", "the counts of run one are not those"),
        ("UPDATE boot_sheets SET head = replace(head, '0.3477', '0.3488')", "the boot sheet of tub-7 is not what"),
        ("UPDATE boot_sheets SET condition = 'provisional'", "the boot sheet of tub-7 is not what"),
        ("DELETE FROM boot_sheets", "the boot sheet of tub-7 is not what"),
    ],
)
def test_damage_is_found_and_named(full, sql, finding):
    assert any(finding in one for one in tamper(full, sql))


def test_a_damaged_file_is_found(full):
    with full.read() as c:
        index = "SELECT rootpage FROM sqlite_master WHERE name = 'ix_alert_events_alert_id_sequence'"
        page = c.exec_driver_sql(index).scalar_one()
        size = c.exec_driver_sql("PRAGMA page_size").scalar_one()
    full.close()  # the last connection folds the write-ahead log into the file
    with (full.settings.home / "rollbook.db").open("r+b") as file:
        file.seek((page - 1) * size)
        file.write(b"\xff" * 200)
    assert any("the database file is damaged" in one for one in upkeep.check(full))


def test_a_row_that_points_nowhere_is_found(full):
    with sqlite3.connect(full.settings.home / "rollbook.db") as loose:
        loose.execute("DELETE FROM vehicle_versions")
    loose.close()
    with full.read() as c:
        findings = [one for one in upkeep.schema.broken_references(c) if "vehicle_versions" in one]
    assert len(findings) == 2


def test_an_empty_or_old_database_is_refused_with_what_to_do(tmp_path, clock, full):
    empty = services_in(tmp_path / "home", clock)
    (tmp_path / "bare").mkdir()
    bare = services_in(tmp_path / "bare", clock)
    with pytest.raises(Unready, match="rollbook migrate"):
        upkeep.require_ready(bare)
    upkeep.require_ready(empty)
    with full.write() as c:
        c.exec_driver_sql("UPDATE alembic_version SET version_num = '0000'")
    with pytest.raises(Unready, match="at revision 0000"):
        upkeep.check(full)


def test_migrate_says_the_revision(tmp_path, clock):
    services = services_in(tmp_path, clock)
    assert upkeep.migrate(services) == "0001"
    assert upkeep.migrate(services) == "0001"
    assert upkeep.check(services) == []


def test_a_backup_is_a_whole_record_of_its_own_and_overwrites_nothing(full, tmp_path, clock):
    target = tmp_path / "copy" / "rollbook.db"
    target.parent.mkdir()
    with full.write() as c:
        c.exec_driver_sql("UPDATE people SET role = role")
    upkeep.backup(full, target)
    copied = services_in(target.parent, clock)
    assert copied.settings.database_url == sqlite_url(target.parent)
    assert upkeep.check(copied) == []
    with pytest.raises(Conflict, match="already"):
        upkeep.backup(full, target)


def test_services_open_nothing_until_they_are_used(tmp_path, clock):
    settings = services_in(tmp_path / "not there yet", clock).settings
    made = make_services(settings)
    assert made.settings == settings
    assert not (tmp_path / "not there yet").exists()
