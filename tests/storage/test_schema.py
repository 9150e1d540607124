"""Migrations: from nothing to head, all or nothing, in a checkout and from an installed wheel."""

from __future__ import annotations

import shutil
import sqlite3
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest
from alembic import command
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext

import migrations
from registry.storage import schema
from registry.storage.engine import DatabaseError, make_engine, reading, writing
from registry.storage.tables import metadata

TOP = Path(__file__).parent.parent.parent


@pytest.fixture
def engine(tmp_path):
    made = make_engine(f"sqlite:///{tmp_path / 'new.db'}")
    yield made
    made.dispose()


def test_migrating_an_empty_file_makes_exactly_the_tables_of_the_program(engine):
    assert schema.migrate(engine) == []
    with reading(engine) as c:
        context = MigrationContext.configure(c, opts={"compare_type": True, "compare_server_default": True})
        assert compare_metadata(context, metadata) == []
        assert schema.current_revision(c) == schema.head_revision()


def test_migrating_again_changes_nothing(engine, tmp_path):
    schema.migrate(engine)
    with writing(engine) as c:
        c.exec_driver_sql("INSERT INTO vehicles (vehicle_id) VALUES ('tub-7')")
    assert schema.migrate(engine) == []
    with reading(engine) as c:
        assert c.exec_driver_sql("SELECT count(*) FROM vehicles").scalar_one() == 1
        assert c.exec_driver_sql("PRAGMA foreign_keys").scalar_one() == 1


def test_every_constraint_has_a_name(engine):
    schema.migrate(engine)
    for table in metadata.tables.values():
        for constraint in table.constraints:
            assert constraint.name, f"{table.name}: {constraint}"
    with reading(engine) as c:
        rows = c.exec_driver_sql("SELECT name, sql FROM sqlite_master WHERE type = 'table'").all()
        for name, sql in rows:
            nameless = ("PRIMARY", "UNIQUE", "CHECK", "FOREIGN")
            assert not [line for line in sql.splitlines() if line.strip().startswith(nameless)], name


def test_a_revision_that_fails_leaves_nothing_of_itself(engine, tmp_path, monkeypatch):
    schema.migrate(engine)
    folder = tmp_path / "migrations"
    (folder / "versions").mkdir(parents=True)
    source = Path(migrations.__file__).parent
    for name in ("env.py", "script.py.mako", "versions/0001_the_record.py"):
        (folder / name).write_text((source / name).read_text(encoding="utf-8"), encoding="utf-8")
    (folder / "versions" / "0002_half.py").write_text(
        'from alembic import op\nrevision = "0002"\ndown_revision = "0001"\nbranch_labels = depends_on = None\n'
        "def upgrade():\n"
        '    op.execute("CREATE TABLE half (n INTEGER)")\n'
        '    op.execute("INSERT INTO nowhere VALUES (1)")\n',
        encoding="utf-8",
    )
    monkeypatch.setattr(migrations, "__file__", str(folder / "__init__.py"))
    with pytest.raises(DatabaseError, match="nowhere"):
        schema.migrate(engine)
    with reading(engine) as c:
        assert schema.current_revision(c) == "0001"
        assert c.exec_driver_sql("SELECT count(*) FROM sqlite_master WHERE name = 'half'").scalar_one() == 0
        assert c.exec_driver_sql("PRAGMA foreign_keys").scalar_one() == 1


def test_a_row_that_points_nowhere_is_named_and_the_database_left_as_it_is(engine, tmp_path):
    schema.migrate(engine)
    with sqlite3.connect(tmp_path / "new.db") as loose:
        columns = "INSERT INTO keys (key_id, key_hash, person, recorded_at) VALUES "
        loose.execute(columns + "('k', 'h', 'Nobody', '2026-01-01')")
    loose.close()
    (broken,) = schema.migrate(engine)
    assert broken == "row 1 of keys points to a row of people that is not there"


def test_down_and_up_again_ends_where_it_was(engine):
    schema.migrate(engine)
    with engine.connect() as c, c.begin():
        c.exec_driver_sql("BEGIN IMMEDIATE")
        config = schema.alembic_config()
        config.attributes["connection"] = c
        command.downgrade(config, "base")
    with reading(engine) as c:
        left = c.exec_driver_sql("SELECT name FROM sqlite_master WHERE type = 'table'").scalars().all()
        assert left == ["alembic_version"]
    assert schema.migrate(engine) == []


def test_the_command_line_of_alembic_works_in_a_checkout(tmp_path):
    environment = {"PATH": "/usr/bin:/bin", "ROLLBOOK_HOME": str(tmp_path / "home")}
    command = [sys.executable, "-m", "alembic", "upgrade", "head"]
    said = subprocess.run(command, cwd=TOP, env=environment, capture_output=True, text=True, check=False)
    assert said.returncode == 0, said.stderr
    engine = make_engine(f"sqlite:///{tmp_path / 'home' / 'rollbook.db'}")
    with reading(engine) as c:
        assert schema.current_revision(c) == schema.head_revision()
    engine.dispose()


@pytest.mark.slow
def test_an_installed_wheel_holds_everything_and_migrates_without_the_checkout(tmp_path):
    wheels, site = tmp_path / "wheels", tmp_path / "site"
    source = tmp_path / "source"  # a build leaves its own folders behind
    for name in ("registry", "migrations", "seed_demo"):
        shutil.copytree(TOP / name, source / name, ignore=shutil.ignore_patterns("__pycache__"))
    for path in (TOP / "pyproject.toml", TOP / "LICENSE", *TOP.glob("README.md")):
        shutil.copy(path, source)
    build = [sys.executable, "-m", "pip", "wheel", "-q", "--no-deps", "-w", str(wheels), str(source)]
    built = subprocess.run(build, capture_output=True, text=True, check=False)
    assert built.returncode == 0, built.stderr
    (wheel,) = wheels.glob("rollbook-*.whl")
    with zipfile.ZipFile(wheel) as archive:
        names = set(archive.namelist())
        archive.extractall(site)
    expected = [
        path.relative_to(TOP).as_posix()
        for folder in ("registry", "migrations", "seed_demo")
        for path in (TOP / folder).rglob("*")
        if path.is_file() and "__pycache__" not in path.parts and path.suffix != ".pyc"
    ]
    assert set(expected) <= names, sorted(set(expected) - names)
    assert not any(name.startswith("tests/") for name in names)
    program = (
        "import sys; sys.path = [sys.argv[1], *[p for p in sys.path if 'site-packages' in p or 'lib/python' in p]]\n"
        "import registry, migrations\n"
        "assert registry.__file__.startswith(sys.argv[1]) and migrations.__file__.startswith(sys.argv[1])\n"
        "from pathlib import Path\n"
        "from registry.procedures import upkeep\n"
        "from registry.services import make_services\n"
        "from registry.settings import Settings\n"
        "services = make_services(Settings.from_environment(Path(sys.argv[2])))\n"
        "print(upkeep.migrate(services), upkeep.check(services))\n"
    )
    said = subprocess.run(
        [sys.executable, "-I", "-c", program, str(site), str(tmp_path / "home")],
        cwd=tmp_path, capture_output=True, text=True, check=False, env={"PATH": "/usr/bin:/bin"},
    )  # fmt: skip
    assert said.returncode == 0, said.stderr
    assert said.stdout == f"{schema.head_revision()} []\n"
