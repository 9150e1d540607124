"""Transactions on SQLite: the traps that lose updates or fail under load."""

from __future__ import annotations

import threading
from pathlib import Path

import pytest

from registry.errors import Unready
from registry.services import Services
from registry.storage.engine import DatabaseError, asking, copy_sqlite, make_engine, reading, writing


def count(services: Services) -> int:
    with services.read() as c:
        return c.exec_driver_sql("SELECT count(*) FROM vehicles").scalar_one()


def insert(c, name: str) -> None:
    c.exec_driver_sql("INSERT INTO vehicles (vehicle_id) VALUES (?)", (name,))


def test_a_write_is_kept_at_the_end_and_undone_on_an_exception(services):
    with services.write() as c:
        insert(c, "kept")

    def fail() -> None:
        with services.write() as c:
            insert(c, "lost")
            raise KeyError

    with pytest.raises(KeyError):
        fail()
    assert count(services) == 1


def test_a_reader_sees_one_state_throughout_while_others_write(services):
    with services.read() as c:
        before = c.exec_driver_sql("SELECT count(*) FROM vehicles").scalar_one()
        with services.write() as w:
            insert(w, "meanwhile")
        assert c.exec_driver_sql("SELECT count(*) FROM vehicles").scalar_one() == before
    assert count(services) == before + 1


def test_writers_that_read_first_wait_for_one_another_and_lose_nothing(services):
    with services.write() as c:
        c.exec_driver_sql("CREATE TABLE tally (n INTEGER NOT NULL)")
        c.exec_driver_sql("INSERT INTO tally VALUES (0)")
    failures: list[BaseException] = []

    def work() -> None:
        try:
            for _ in range(25):
                with services.write() as c:
                    n = c.exec_driver_sql("SELECT n FROM tally").scalar_one()
                    c.exec_driver_sql("UPDATE tally SET n = ?", (n + 1,))
        except DatabaseError as error:
            failures.append(error)

    threads = [threading.Thread(target=work) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert failures == []
    with services.read() as c:
        assert c.exec_driver_sql("SELECT n FROM tally").scalar_one() == 8 * 25


def test_a_writer_inside_a_writer_is_refused_at_once_instead_of_waiting_for_itself(services):
    with services.write(), pytest.raises(RuntimeError, match="inside another one"), services.write():
        pass
    with services.write() as c:
        insert(c, "after")
    assert count(services) == 1


def test_a_writer_that_waited_in_vain_says_who_is_in_the_way(services, tmp_path, monkeypatch):
    monkeypatch.setattr("registry.storage.engine.BUSY_TIMEOUT_S", 0.05)
    hurried = make_engine(services.settings.database_url)
    with services.write(), pytest.raises(Unready, match="another process has been writing"), writing(hurried):
        pass
    hurried.dispose()


def test_a_database_that_cannot_be_reached_is_said(tmp_path):
    engine = make_engine(f"sqlite:///{tmp_path / 'nowhere' / 'rollbook.db'}")
    with pytest.raises(Unready, match="cannot be reached"), reading(engine):
        pass
    with pytest.raises(Unready, match="cannot be read"), asking(engine):
        pass


def test_a_question_to_a_database_without_tables_says_to_migrate(tmp_path):
    engine = make_engine(f"sqlite:///{tmp_path / 'empty.db'}")
    with pytest.raises(Unready, match="rollbook migrate"), asking(engine) as bare:
        bare.connection.cursor().execute("SELECT 1 FROM keys")
    engine.dispose()


def test_two_databases_may_be_written_together(services, tmp_path):
    other = make_engine(f"sqlite:///{tmp_path / 'other.db'}")
    with services.write() as c, writing(other) as d:
        insert(c, "here")
        d.exec_driver_sql("CREATE TABLE there (n INTEGER)")
    with reading(other) as d:
        assert d.exec_driver_sql("SELECT count(*) FROM there").scalar_one() == 0
    other.dispose()


def test_foreign_keys_are_enforced(services):
    with pytest.raises(DatabaseError, match="FOREIGN KEY"), services.write() as c:
        c.exec_driver_sql(
            "INSERT INTO run_states (run_id, use, reasons, at, by) VALUES ('none', 'usable', '[]', '2026-01-01', 'x')"
        )


def test_the_journal_mode_lets_readers_go_on_while_one_writes(services):
    with services.read() as c:
        assert c.exec_driver_sql("PRAGMA journal_mode").scalar_one() == "wal"
        assert c.exec_driver_sql("PRAGMA synchronous").scalar_one() == 2


def test_only_what_can_be_built_again_may_do_without_waiting_for_the_disk(tmp_path):
    engine = make_engine(f"sqlite:///{tmp_path / 'demo.db'}", durable=False)
    with reading(engine) as c:
        assert c.exec_driver_sql("PRAGMA synchronous").scalar_one() == 1
    engine.dispose()


@pytest.mark.parametrize("url", ["sqlite://", "sqlite:///:memory:"])
def test_a_database_in_memory_is_refused(url):
    with pytest.raises(ValueError, match="name a file"):
        make_engine(url)


def test_a_copy_is_consistent_while_the_database_is_in_use(services, tmp_path):
    with services.write() as c:
        insert(c, "one")
    target: Path = tmp_path / "copy.db"
    with services.read() as c:
        copy_sqlite(c, target)
    copied = make_engine(f"sqlite:///{target}")
    with reading(copied) as c:
        assert c.exec_driver_sql("SELECT vehicle_id FROM vehicles").scalar_one() == "one"
        assert c.exec_driver_sql("PRAGMA integrity_check").scalar_one() == "ok"
    copied.dispose()
