"""What the installation chose, read from the environment once. Nothing else in the program looks at the environment."""

from __future__ import annotations

import os
import secrets
import tempfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TypeVar

from registry.clock import duration_s
from registry.errors import FieldError, Invalid, Unready

_SECRET_FILE = "secret_key"
_T = TypeVar("_T")


@dataclass(frozen=True)
class Settings:
    """One installation's choices.

    ``home`` holds the database (unless ``database_url`` says otherwise) and the secret key. ``key`` is the API key that
    the command line acts under, when one is given.
    """

    home: Path
    database_url: str
    secret_key: str = field(repr=False)
    evaluate_every_s: float = 6 * 3600.0
    window_runs: int = 60
    silence_days: float = 30.0
    two_person: bool = False
    key: str | None = field(default=None, repr=False)

    @classmethod
    def from_environment(cls, home: Path | None = None, *, create: bool = True) -> Settings:
        """Read the ``ROLLBOOK_…`` variables.

        Parameters
        ----------
        home
            Overrides ``ROLLBOOK_HOME``; without either it is ``./rollbook-home``.
        create
            Make the home and its secret key when they are missing. Without it a missing home is refused, so that a
            mistyped folder is not quietly filled.

        Raises
        ------
        Invalid
            A variable cannot be read; the error names it.
        Unready
            The home does not exist and was not to be made.
        """
        variables = os.environ
        folder = (home or Path(variables.get("ROLLBOOK_HOME") or "rollbook-home")).expanduser().absolute()
        elsewhere = variables.get("ROLLBOOK_DATABASE_URL")
        if create:
            folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        elif not (folder.is_dir() if elsewhere else (folder / "rollbook.db").is_file()):
            raise Unready(
                f"there is no home at {folder}: name it with --home or ROLLBOOK_HOME, or run 'rollbook migrate'"
            )
        return cls(
            home=folder,
            database_url=elsewhere or sqlite_url(folder),
            secret_key=variables.get("ROLLBOOK_SECRET_KEY") or _kept_secret(folder),
            evaluate_every_s=_read(variables, "ROLLBOOK_EVALUATE_EVERY", duration_s, 6 * 3600.0),
            window_runs=_read(variables, "ROLLBOOK_WINDOW_RUNS", _whole_from(3), 60),
            silence_days=_read(variables, "ROLLBOOK_SILENCE_DAYS", _days, 30.0),
            two_person=_read(variables, "ROLLBOOK_TWO_PERSON", _switch, default=False),
            key=variables.get("ROLLBOOK_KEY") or None,
        )


def sqlite_url(home: Path) -> str:
    """The address of the embedded database in a home."""
    return f"sqlite:///{home / 'rollbook.db'}"


def _kept_secret(home: Path) -> str:
    """The home's secret key, made on first use. Two processes that start together agree on one: linking is atomic."""
    path = home / _SECRET_FILE
    if not path.exists():
        handle, made = tempfile.mkstemp(dir=home)  # readable by its owner only
        try:
            with os.fdopen(handle, "w", encoding="ascii") as file:
                file.write(secrets.token_hex(32))
            os.link(made, path)
        except FileExistsError:
            return path.read_text(encoding="ascii").strip()
        finally:
            Path(made).unlink()
    return path.read_text(encoding="ascii").strip()


def _read(variables: Mapping[str, str], name: str, parse: Callable[[str], _T], default: _T) -> _T:
    text = variables.get(name)
    if not text:
        return default
    try:
        return parse(text)
    except ValueError as error:
        raise Invalid(f"{name}: {error}", (FieldError(name, str(error)),)) from error


def _whole_from(least: int) -> Callable[[str], int]:
    def parse(text: str) -> int:
        if not text.strip().isdigit() or int(text) < least:
            raise ValueError(f"{text!r} must be a whole number from {least}")
        return int(text)

    return parse


def _days(text: str) -> float:
    try:
        days = float(text)
    except ValueError:
        days = 0.0
    if not 0.0 < days < 36500.0:
        raise ValueError(f"{text!r} must be a number of days above 0")
    return days


def _switch(text: str) -> bool:
    switch = {"1": True, "true": True, "yes": True, "on": True, "0": False, "false": False, "no": False, "off": False}
    if text.strip().lower() not in switch:
        raise ValueError(f"{text!r} must be yes or no")
    return switch[text.strip().lower()]
