"""A home, a way to run commands in it, and drives whose parameters are known."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result

from registry.cli import main

LEFT_MM, RIGHT_MM, WIDTH_MM = 0.3477, 0.3479, 632.0

TUG: dict[str, Any] = {
    "name": "Tug 1",
    "drive": "wheels",
    "nominal": {"left_mm_per_tick": 0.349, "right_mm_per_tick": 0.349, "width_mm": 620},
    "max_speed_mm_per_s": 2000,
}


@dataclass
class Commands:
    """Runs ``rollbook …`` in one home."""

    folder: Path
    home: Path
    environment: dict[str, str]

    def __call__(self, *arguments: object, stdin: str | bytes | None = None, home: Path | None = None) -> Result:
        given = [*map(str, arguments), "--home", str(home or self.home)]
        return CliRunner(env=self.environment).invoke(main, given, input=stdin)

    def json(self, *arguments: object, stdin: str | None = None) -> Any:
        done = self(*arguments, "--json", stdin=stdin)
        assert done.exit_code == 0, done.stderr
        return json.loads(done.stdout)

    def refused(self, *arguments: object, stdin: str | bytes | None = None, home: Path | None = None) -> str:
        """The sentences of a refusal, which are all there is."""
        done = self(*arguments, stdin=stdin, home=home)
        assert done.exit_code == 1, (done.exit_code, done.stderr)
        assert done.stdout == ""
        assert "Traceback" not in done.stderr
        assert "fault of the program" not in done.stderr
        return done.stderr

    def write(self, name: str, content: object) -> Path:
        path = self.folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        if isinstance(content, bytes):
            path.write_bytes(content)
        else:
            path.write_text(content if isinstance(content, str) else json.dumps(content), encoding="utf-8")
        return path

    def person(self, name: str, role: str) -> str:
        """Add a person and answer their API key."""
        assert self("person", "add", name, "--role", role, "--password-stdin", stdin="a long password\n").exit_code == 0
        return self("key", "issue", "--person", name).stdout.strip()


@pytest.fixture
def rollbook(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Commands:
    monkeypatch.chdir(tmp_path)
    for name in ("ROLLBOOK_HOME", "ROLLBOOK_KEY", "ROLLBOOK_DATABASE_URL"):
        monkeypatch.delenv(name, raising=False)
    return Commands(tmp_path, tmp_path / "home", {})


@pytest.fixture
def tug(rollbook: Commands) -> str:
    """A vehicle on the register."""
    assert rollbook("vehicle", "add", rollbook.write("tug-1.json", TUG)).exit_code == 0
    return "tug-1"


def straight(length_mm: float) -> tuple[float, float]:
    """Ticks of a drive straight ahead."""
    return length_mm / LEFT_MM, length_mm / RIGHT_MM


def spin(turns: float) -> tuple[float, float]:
    """Ticks of a turn on the spot, counter-clockwise positive."""
    rolled_mm = math.tau * turns * WIDTH_MM / 2.0
    return -rolled_mm / LEFT_MM, rolled_mm / RIGHT_MM


def tick_log(ticks: tuple[float, float], seconds: int = 40, first: int = 100) -> str:
    """A log at 10 Hz of steady driving, from counters that stand at ``first``; they wrap at 32 bits."""
    rows = ["time_s,left_counts,right_counts"]
    for sample in range(seconds * 10 + 1):
        share = sample / (seconds * 10)
        left, right = (round(first + share * side) % 2**32 for side in ticks)
        rows.append(f"{sample / 10:.1f},{left},{right}")
    return "\n".join(rows) + "\n"


@pytest.fixture
def driven(rollbook: Commands, tug: str) -> Path:
    """A manifest of six drives that determine all three quantities, with readings a little off."""
    rows = [
        "vehicle_id,run_key,started_at,ticks_file,x_mm,y_mm,heading_deg,distance_mm,turns,position_sd_mm,heading_sd_deg"
    ]
    for number, off_mm in enumerate((1.2, -0.9, 0.4)):
        rollbook.write(f"logs/straight{number}.csv", tick_log(straight(12_000)))
        rows.append(
            f"{tug},straight{number},2026-0{number + 1}-01T08:00:00Z,logs/straight{number}.csv,"
            f"{12_000 + off_mm},{off_mm},{off_mm / 100},,,3,0.1"
        )
    for number, off_deg in enumerate((0.05, -0.08, 0.02)):
        turns = 4 if number < 2 else -4
        rollbook.write(f"logs/spin{number}.csv", tick_log(spin(turns)))
        rows.append(
            f"{tug},spin{number},2026-0{number + 1}-02T08:00:00Z,logs/spin{number}.csv,"
            f"{off_deg},{off_deg},{off_deg},,{turns},3,0.1"
        )
    return rollbook.write("runs.csv", "\n".join(rows) + "\n")
