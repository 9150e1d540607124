from __future__ import annotations

import os
import stat
from concurrent.futures import ThreadPoolExecutor

import pytest

from registry.errors import Invalid, Unready
from registry.settings import Settings


@pytest.fixture
def bare(monkeypatch):
    for name in [name for name in os.environ if name.startswith("ROLLBOOK_")]:
        monkeypatch.delenv(name)
    return monkeypatch


def test_without_any_variable_the_defaults_hold(bare, tmp_path):
    bare.chdir(tmp_path)
    settings = Settings.from_environment()
    assert settings.home == tmp_path / "rollbook-home"
    assert settings.database_url == f"sqlite:///{tmp_path}/rollbook-home/rollbook.db"
    assert (settings.evaluate_every_s, settings.window_runs, settings.silence_days) == (21600.0, 60, 30.0)
    assert (settings.two_person, settings.key) == (False, None)


def test_every_variable_is_read(bare, tmp_path):
    for name, value in {
        "HOME": str(tmp_path / "elsewhere"),
        "DATABASE_URL": "postgresql+psycopg://localhost/rollbook",
        "SECRET_KEY": "given",
        "EVALUATE_EVERY": "30min",
        "WINDOW_RUNS": "40",
        "SILENCE_DAYS": "10.5",
        "TWO_PERSON": "yes",
        "KEY": "the key",
    }.items():
        bare.setenv(f"ROLLBOOK_{name}", value)
    expected = Settings(
        home=tmp_path / "elsewhere",
        database_url="postgresql+psycopg://localhost/rollbook",
        secret_key="given",
        evaluate_every_s=1800.0,
        window_runs=40,
        silence_days=10.5,
        two_person=True,
        key="the key",
    )
    assert Settings.from_environment() == expected
    assert Settings.from_environment(tmp_path / "named").home == tmp_path / "named"


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("EVALUATE_EVERY", "6"),
        ("EVALUATE_EVERY", "0h"),
        ("EVALUATE_EVERY", "soon"),
        ("WINDOW_RUNS", "2"),
        ("WINDOW_RUNS", "many"),
        ("SILENCE_DAYS", "0"),
        ("SILENCE_DAYS", "nan"),
        ("TWO_PERSON", "perhaps"),
    ],
)
def test_a_variable_that_cannot_be_read_is_named(bare, tmp_path, name, value):
    bare.setenv(f"ROLLBOOK_{name}", value)
    with pytest.raises(Invalid, match=f"ROLLBOOK_{name}"):
        Settings.from_environment(tmp_path)


def test_the_secret_key_is_made_once_and_readable_by_its_owner_only(bare, tmp_path):
    first = Settings.from_environment(tmp_path / "home")
    again = Settings.from_environment(tmp_path / "home")
    assert first.secret_key == again.secret_key
    assert len(first.secret_key) == 64
    path = tmp_path / "home" / "secret_key"
    assert stat.S_IMODE(path.stat().st_mode) == 0o600
    assert [one.name for one in (tmp_path / "home").iterdir()] == ["secret_key"]
    assert stat.S_IMODE((tmp_path / "home").stat().st_mode) == 0o700
    assert first.secret_key not in repr(first)


def test_processes_that_start_together_agree_on_one_secret(bare, tmp_path):
    home = tmp_path / "home"
    home.mkdir()
    with ThreadPoolExecutor(8) as pool:
        made = list(pool.map(lambda _: Settings.from_environment(home).secret_key, range(32)))
    assert len(set(made)) == 1


def test_a_home_that_is_not_there_is_refused_where_it_is_not_to_be_made(bare, tmp_path):
    with pytest.raises(Unready, match="rollbook migrate"):
        Settings.from_environment(tmp_path / "mistyped", create=False)
    assert not (tmp_path / "mistyped").exists()
