"""The whole line on a real PostgreSQL: migrate, register, take runs, adopt, boot, alert, evaluate, check.

The server is the one of ``ROLLBOOK_TEST_POSTGRES_URL``, else Debian's binaries, run as an unprivileged user in a
temporary folder on a socket there. Without either the tests are skipped, unless ``ROLLBOOK_TEST_NO_SKIP`` is set.
"""

from __future__ import annotations

import os
import pwd
import shutil
import subprocess
import tempfile
import threading
from collections.abc import Iterator
from dataclasses import replace
from datetime import timedelta
from pathlib import Path
from uuid import uuid4

import numpy as np
import pytest
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from sqlalchemy import create_engine, make_url

from registry.domain.boot import BootStatement
from registry.domain.person import Actor
from registry.domain.run import ClosureStatement, Conditions
from registry.errors import Conflict
from registry.jobs.fleet_pass import run_pass
from registry.jobs.scheduler import look
from registry.procedures import alerting, boot, intake, upkeep
from registry.procedures.adoption import adopt, withdraw
from registry.procedures.maintenance import record_maintenance
from registry.procedures.people import actor_for_key, add_person, issue_key
from registry.procedures.registration import put_vehicle
from registry.services import Services
from registry.storage import alerts, calibrations, evaluations, journal, runs, vehicles
from registry.storage.engine import DatabaseError
from registry.storage.journal import JournalFilter
from registry.storage.tables import metadata
from tests.conftest import Proposer, services_in
from tests.storage.samples import add_runs, evaluation_of, run_of

pytestmark = pytest.mark.postgres


def binaries() -> Path | None:
    found = sorted(Path("/usr/lib/postgresql").glob("*/bin/initdb"), key=lambda path: int(path.parts[-3]))
    return found[-1].parent if found else None


def unprivileged() -> list[str] | None:
    """How to run a command as a user that a server accepts; None when there is no way."""
    if os.geteuid() != 0:
        return []
    try:
        pwd.getpwnam("postgres")
    except KeyError:
        return None
    return ["setpriv", "--reuid=postgres", "--regid=postgres", "--init-groups"] if shutil.which("setpriv") else None


@pytest.fixture(scope="module")
def server_url() -> Iterator[str]:
    given = os.environ.get("ROLLBOOK_TEST_POSTGRES_URL")
    if given:
        yield given
        return
    folder, become = binaries(), unprivileged()
    if folder is None or become is None:
        why = "no PostgreSQL: neither ROLLBOOK_TEST_POSTGRES_URL nor server binaries that could be run here"
        if os.environ.get("ROLLBOOK_TEST_NO_SKIP"):
            pytest.fail(why)
        pytest.skip(why)
    home = Path(tempfile.mkdtemp(prefix="pg"))
    if become:
        shutil.chown(home, "postgres", "postgres")

    def run(*command: str) -> None:
        done = subprocess.run(
            [*become, *command], cwd=home, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True, check=False
        )
        assert done.returncode == 0, done.stderr

    data = str(home / "data")
    run(str(folder / "initdb"), "-D", data, "-U", "rollbook", "-A", "trust", "-N", "--no-locale", "-E", "UTF8")
    options = f"-c listen_addresses='' -c unix_socket_directories='{home}' -c fsync=off"
    run(str(folder / "pg_ctl"), "-D", data, "-w", "-l", str(home / "log"), "-o", options, "start")
    try:
        yield f"postgresql+psycopg://rollbook@/postgres?host={home}"
    finally:
        run(str(folder / "pg_ctl"), "-D", data, "-w", "-m", "immediate", "stop")
        shutil.rmtree(home)


@pytest.fixture
def services(server_url: str, tmp_path: Path, clock) -> Iterator[Services]:
    """Services on a database of its own, migrated."""
    name = f"rollbook_test_{uuid4().hex[:12]}"
    admin = create_engine(server_url, isolation_level="AUTOCOMMIT")
    with admin.connect() as c:
        c.exec_driver_sql(f"CREATE DATABASE {name}")
    url = make_url(server_url).set(database=name).render_as_string(hide_password=False)
    made = services_in(tmp_path, clock, database_url=url)
    assert upkeep.migrate(made) == "0001"
    yield made
    made.close()
    with admin.connect() as c:
        c.exec_driver_sql(f"DROP DATABASE {name} WITH (FORCE)")
    admin.dispose()


@pytest.fixture
def proposer(services, clock, approver, statement) -> Proposer:
    put_vehicle(services, approver, "tub-7", statement)
    return Proposer(services, clock, approver)


def test_the_migrated_schema_is_exactly_that_of_the_program(services):
    with services.read() as c:
        assert compare_metadata(MigrationContext.configure(c, opts={"compare_type": True}), metadata) == []
    assert upkeep.migrate(services) == "0001"


def test_a_vehicle_is_registered_fitted_evaluated_and_boots(services, approver, technician, keeper, statement, clock):
    wide = replace(statement, nominal=replace(statement.nominal, width_m=0.62))
    version, created = put_vehicle(services, approver, "tub-7", wide)
    assert created
    assert version.valid_from is None
    ticks = np.arange(0, 20001, 100)
    straight = intake.RunStatement(
        run_key="monday 1",
        started_at=clock() - timedelta(hours=1),
        time_s=np.arange(ticks.size) * 0.05,
        left_counts=ticks,
        right_counts=ticks,
        closure=ClosureStatement(6.98, 0.0, 0.0, None, None, 0.005, 0.004),
        conditions=Conditions(surface="concrete"),
        content_digest="d" * 64,
    )
    run, created = intake.take_run(services, technician, "tub-7", straight)
    assert created
    assert run.use == "usable"
    assert intake.take_run(services, technician, "tub-7", straight) == (run, False)
    with pytest.raises(Conflict):
        intake.take_run(services, technician, "tub-7", replace(straight, content_digest="e" * 64))
    with services.read() as c:
        assert np.array_equal(runs.counts(c, run.run_id).left, ticks)

    adopted = Proposer(services, clock, approver).adopt()
    add_person(services, keeper, "Ida", "technician", "oak-bridge-9")
    assert actor_for_key(services, issue_key(services, keeper, person="Ida")) == Actor("person", "Ida", "technician")
    key = issue_key(services, keeper, vehicle_id="tub-7")
    sheet, _key32 = boot.fetch(services, key, "tub-7")
    assert (sheet.calibration_id, sheet.condition) == (adopted.calibration_id, "good")
    statement_of_boot = BootStatement(1, sheet.digest, "fetched", None, None, None)
    assert boot.report_boot(services, technician, "tub-7", statement_of_boot).matched
    clock.move(hours=1)
    outcome = run_pass(services)
    assert outcome.looked_at == 1
    assert look(services, "one").said == "a pass was made"
    assert upkeep.check(services) == []


def test_questions_mismatches_and_withdrawals_work_as_on_the_embedded_database(
    services, proposer, approver, technician, clock
):
    first = proposer.adopt()
    clock.move(days=1)
    record_maintenance(services, technician, "tub-7", clock(), "part_fitted", "left", "new band")
    assert boot.parameters(services, technician, "tub-7").condition == "questioned"
    boot.report_boot(services, technician, "tub-7", BootStatement(9, None, "kept", None, None, None))
    with services.read() as c:
        (alert,) = alerts.page(c, "open", "tub-7", 10, None).items
    assert alert.content.kind == "boot_mismatch"
    assert alerting.acknowledge(services, technician, alert.alert_id, "on it").standing == "acknowledged"
    clock.move(days=1)
    second = proposer.propose()
    late = adopt(services, approver, second.calibration_id, "late", clock() - timedelta(hours=3))
    done = withdraw(services, approver, late.calibration_id, "misread", "reinstate", first.number)
    assert done.in_force is not None
    assert boot.parameters(services, technician, "tub-7").condition == "questioned"
    with services.read() as c:
        entry = calibrations.in_force(c, "tub-7", clock() - timedelta(hours=2), clock())
        assert entry is not None
        assert entry.number == 2
        assert calibrations.withdrawn_numbers(c, "tub-7") == (2,)
    assert upkeep.check(services) == []


def test_pages_and_histories_come_back_as_stored(services, proposer, clock, statement):
    with services.write() as c:
        add_runs(c, *(run_of(f"r{i}", clock() + timedelta(minutes=i // 2)) for i in range(5)))
        vehicles.add_version(c, "tub-8", statement, clock(), "Abel")
        assert runs.by_id(c, "r3") == run_of("r3", clock() + timedelta(minutes=1))
        first = runs.page(c, "tub-7", 3, None)
        rest = runs.page(c, "tub-7", 3, first.after)
        assert [run.run_id for run in (*first.items, *rest.items)] == ["r4", "r3", "r2", "r1", "r0"]
        assert [one.vehicle_id for one in vehicles.page(c, 5, None).items] == ["tub-8", "tub-7"]
        evaluations.add(c, evaluation_of("e1", clock(), None))
        assert evaluations.latest_all(c)["tub-7"] == evaluation_of("e1", clock(), None)


def test_writers_follow_one_another_so_that_the_journal_stays_consecutive(services, clock):
    failures: list[BaseException] = []

    def work(name: str) -> None:
        try:
            for i in range(20):
                with services.write() as c:
                    journal.write(c, clock(), name, "note", None, {"n": i})
        except DatabaseError as error:
            failures.append(error)

    threads = [threading.Thread(target=work, args=(f"writer {i}",)) for i in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert failures == []
    with services.read() as c:
        assert journal.verify(c) == []
        assert [e.entry for e in journal.page(c, JournalFilter(), 100, None).items] == list(range(80, 0, -1))


def test_a_reader_cannot_write_and_a_failed_write_leaves_nothing(services, clock):
    with pytest.raises(DatabaseError, match="read-only"), services.read() as c:
        journal.write(c, clock(), "x", "note", None, {})

    def fail() -> None:
        with services.write() as c:
            journal.write(c, clock(), "x", "note", None, {})
            c.exec_driver_sql("INSERT INTO nowhere VALUES (1)")

    with pytest.raises(DatabaseError, match="nowhere"):
        fail()
    with services.read() as c:
        assert journal.page(c, JournalFilter(), 9, None).items == ()


def test_a_backup_is_left_to_the_tools_of_postgresql(services, tmp_path):
    with pytest.raises(Conflict, match="pg_dump"):
        upkeep.backup(services, tmp_path / "copy.db")
