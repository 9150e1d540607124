"""Keeps the arrows between the rooms pointing down, and says which room a stray line belongs to."""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import pytest

TOP = Path(__file__).parent.parent
REGISTRY = TOP / "registry"

#: What each room may import from `registry`. A room not named here has no business in the house.
MAY_IMPORT: dict[str, set[str]] = {
    "numerics": {"numerics"},
    "domain": {"domain", "numerics", "errors"},
    "storage": {"storage", "domain", "numerics", "errors"},
    "procedures": {"procedures", "storage", "domain", "numerics", "errors", "clock", "settings", "services"},
    "jobs": {"jobs", "procedures", "storage", "domain", "numerics", "errors", "clock", "settings", "services"},
    "api": {"api", "procedures", "storage", "domain", "numerics", "errors", "clock", "settings", "services"},
    "web": {"web", "procedures", "storage", "domain", "numerics", "errors", "clock", "settings", "services"},
    "errors": set(),
    "clock": set(),
    "settings": {"errors", "clock"},
    "services": {"settings", "clock", "storage"},
    "boot_client": set(),
    "app": {"api", "web", "jobs", "procedures", "storage", "domain", "errors", "clock", "settings", "services"},
    "commands": {"commands", "app", "api", "web", "jobs", "procedures", "storage", "domain", "errors", "clock",
                 "settings", "services"},
    "cli": {"commands", "app", "api", "web", "jobs", "procedures", "storage", "domain", "errors", "clock", "settings",
            "services"},
    "__main__": {"cli"},
    "__init__": set(),
}  # fmt: skip

#: Packages that only some files may import, and where what needs them belongs.
KEPT_TO: dict[str, tuple[tuple[str, ...], str]] = {
    "sqlalchemy": (("registry/storage/", "migrations/"), "a line that would change if a table changed: storage"),
    "alembic": (("registry/storage/schema.py", "migrations/"), "a line about revisions: storage/schema.py"),
    "apscheduler": (("registry/jobs/scheduler.py",), "a line that would change with the schedule: jobs/scheduler.py"),
    "uuid": (("registry/clock.py",), "a fresh identity: services.new_id, made in clock.py"),
    "flask": (
        ("registry/api/", "registry/web/", "registry/app.py", "registry/commands/"),
        "a line that would change with a URL: api or web",
    ),
    "flask_openapi3": (("registry/api/",), "a line that would change with a JSON field: api"),
    "pydantic": (("registry/api/", "registry/commands/"), "a line that would change with a JSON field: api"),
    "altair": (("registry/web/",), "a line that would change only with the look: web"),
    "click": (("registry/cli.py", "registry/commands/"), "a line that starts things: cli"),
    "argon2": (("registry/procedures/people.py",), "a line about passwords: procedures/people.py"),
}
ENVIRONMENT = ("environ", "getenv", "putenv", "environb")


@dataclass(frozen=True)
class Line:
    """One import, or one use of a name, at a line of a file."""

    path: Path
    number: int
    name: str

    def where(self) -> str:
        return f"{self.path.relative_to(TOP)}:{self.number}"

    def file(self) -> str:
        return self.path.relative_to(TOP).as_posix()


def files(*folders: Path) -> list[Path]:
    found = [path for folder in folders for path in sorted(folder.rglob("*.py"))]
    assert found, f"no file in {folders}"
    return found


@cache
def nodes(path: Path) -> tuple[ast.AST, ...]:
    return tuple(ast.walk(ast.parse(path.read_text(encoding="utf-8"))))


def imports(path: Path) -> Iterator[Line]:
    """Every module that a file imports, `from x import y` as x.y, so that `from registry import clock` is seen."""
    for node in nodes(path):
        if isinstance(node, ast.Import):
            yield from (Line(path, node.lineno, alias.name) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                parts = path.relative_to(TOP).with_suffix("").parts[: -node.level]
                base = ".".join((*parts, base)).rstrip(".")
            yield from (Line(path, node.lineno, f"{base}.{alias.name}") for alias in node.names)


def attributes(path: Path) -> Iterator[Line]:
    """Every dotted name that a file uses, such as `os.environ` or `datetime.now`."""
    for node in nodes(path):
        if isinstance(node, ast.Attribute):
            yield Line(path, node.lineno, ast.unparse(node))


def room_of(path: Path) -> str:
    inside = path.relative_to(REGISTRY)
    return inside.parts[0] if len(inside.parts) > 1 else inside.stem


def target_of(name: str) -> str | None:
    """The room that an import of `registry.…` leads to; None for anything else."""
    parts = name.split(".")
    return parts[1] if parts[0] == "registry" and len(parts) > 1 else None


def test_every_room_imports_only_the_rooms_below_it():
    stray = []
    for path in files(REGISTRY):
        room = room_of(path)
        assert room in MAY_IMPORT, f"{path.relative_to(TOP)} stands in no room of the house"
        for line in imports(path):
            target = target_of(line.name)
            if target is not None and target not in MAY_IMPORT[room]:
                stray.append(f"{line.where()}: {room} imports {line.name}; arrows point down only, so what it needs of "
                             f"{target} is handed to it by the room above")  # fmt: skip
    assert not stray, "\n".join(stray)


def test_doors_and_jobs_never_import_one_another():
    rooms = {"api", "web", "jobs"}
    for room in rooms:
        assert not MAY_IMPORT[room] & (rooms - {room})


@pytest.mark.parametrize("package", sorted(KEPT_TO))
def test_a_package_is_imported_only_where_its_lines_belong(package: str):
    allowed, belongs = KEPT_TO[package]
    stray = [
        f"{line.where()}: imports {line.name}; {belongs}"
        for path in files(REGISTRY, TOP / "migrations", TOP / "seed_demo")
        for line in imports(path)
        if line.name.split(".")[0] == package and not line.file().startswith(allowed)
    ]
    assert not stray, "\n".join(stray)


def test_numerics_import_numpy_scipy_and_the_standard_library_only():
    allowed = {"numpy", "scipy", "registry", *sys.stdlib_module_names}
    stray = [
        f"{line.where()}: imports {line.name}; numerics know arrays and nothing else"
        for path in files(REGISTRY / "numerics")
        for line in imports(path)
        if line.name.split(".")[0] not in allowed
    ]
    assert not stray, "\n".join(stray)


def test_domain_imports_the_standard_library_and_numerics_only():
    allowed = {"registry", "numpy", *sys.stdlib_module_names}
    stray = [
        f"{line.where()}: imports {line.name}; a rule that an engineer would argue about needs no such thing"
        for path in files(REGISTRY / "domain")
        for line in imports(path)
        if line.name.split(".")[0] not in allowed
    ]
    assert not stray, "\n".join(stray)


def test_the_boot_client_imports_the_standard_library_only():
    path = REGISTRY / "boot_client.py"
    stray = [line.where() for line in imports(path) if line.name.split(".")[0] not in sys.stdlib_module_names]
    assert not stray, f"{stray}: the file is copied to a vehicle alone"


def test_only_settings_look_at_the_environment():
    exempt = {"registry/settings.py", "registry/boot_client.py"}
    stray = [
        f"{line.where()}: {line.name}; what the installation chose is read in settings.py"
        for path in files(REGISTRY, TOP / "migrations", TOP / "seed_demo")
        for line in [*attributes(path), *imports(path)]
        if line.name.startswith("os.") and line.name.split(".")[1] in ENVIRONMENT and line.file() not in exempt
    ]
    assert not stray, "\n".join(stray)


def test_only_the_clock_asks_for_the_time_and_for_identities():
    asks = ("datetime.now", "datetime.utcnow", "datetime.today", "date.today", "uuid.uuid4", "uuid.uuid1")
    exempt = {"registry/clock.py", "registry/boot_client.py"}
    stray = [
        f"{line.where()}: {line.name}; the time and identities come from services.now and services.new_id"
        for path in files(REGISTRY, TOP / "seed_demo")
        for line in [*attributes(path), *imports(path)]
        if (line.name.endswith(asks) or line.name == "time.time") and line.file() not in exempt
    ]
    assert not stray, "\n".join(stray)


def test_sql_is_sent_from_storage_only():
    sends = ("exec_driver_sql", "driver_connection", "executescript")
    stray = [
        f"{line.where()}: {line.name}; SQL lives in storage and migrations"
        for path in files(REGISTRY, TOP / "seed_demo")
        for line in attributes(path)
        if line.name.endswith(sends) and room_of_any(path) != "storage"
    ]
    assert not stray, "\n".join(stray)


def room_of_any(path: Path) -> str:
    return room_of(path) if path.is_relative_to(REGISTRY) else path.relative_to(TOP).parts[0]


def test_every_room_says_its_rule_in_one_docstring():
    for path in files(REGISTRY, TOP / "migrations", TOP / "seed_demo"):
        if path.name == "__init__.py":
            tree = ast.parse(path.read_text(encoding="utf-8"))
            assert ast.get_docstring(tree), f"{path.relative_to(TOP)} does not say the rule of its room"
            assert len(tree.body) == 1, f"{path.relative_to(TOP)} holds more than its docstring"


def test_a_stray_line_would_be_seen(tmp_path):
    path = tmp_path / "stray.py"
    path.write_text("import os\nfrom registry import clock\nos.environ['X']\n", encoding="utf-8")
    assert [line.name for line in imports(path)] == ["os", "registry.clock"]
    assert target_of("registry.clock") == "clock"
    assert "os.environ" in [line.name for line in attributes(path)]
