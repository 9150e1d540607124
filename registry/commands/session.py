"""What every command has in common: the home, who is acting, text or JSON, and a progress bar."""

from __future__ import annotations

import getpass
import json
import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import wraps
from pathlib import Path
from typing import Any, Concatenate, ParamSpec

import click
from rich.console import Console
from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeElapsedColumn
from rich.table import Table

from registry.domain.person import Actor
from registry.errors import NotSignedIn, Refusal
from registry.procedures import people, upkeep
from registry.services import Services, make_services
from registry.settings import Settings

P = ParamSpec("P")

#: Lines that no terminal is there to break.
_WIDE = 200


@dataclass(frozen=True)
class Session:
    """One command at work on a home."""

    services: Services
    actor: Actor
    place: Place


@dataclass(frozen=True)
class Place:
    """Where a command works, and how it answers."""

    home: Path | None
    as_json: bool

    def settings(self, *, create: bool = False) -> Settings:
        """The settings of the home; with ``create`` a missing home is made."""
        return Settings.from_environment(self.home, create=create)

    def open(self, *, create: bool = False) -> Session:
        """
        Open the home's database.

        Parameters
        ----------
        create
            Make the database where there is none yet. A database of an older revision is never touched: that is
            ``rollbook migrate``.

        Raises
        ------
        Unready
            There is no home or no database, or it is not at the newest revision.
        NotSignedIn
            ``ROLLBOOK_KEY`` is no valid key.
        """
        settings = self.settings(create=create)
        services = make_services(settings)
        if create and upkeep.is_empty(services):
            upkeep.migrate(services)
        upkeep.require_ready(services)
        return Session(services, _acting(services), self)

    def answer(self, document: object, text: str | Table | None = None) -> None:
        """Write the answer to stdout: the document with ``--json``, else the text."""
        if self.as_json:
            click.echo(json.dumps(document, ensure_ascii=False, indent=2))
        elif isinstance(text, Table):
            wide = None if sys.stdout.isatty() else _WIDE
            Console(file=sys.stdout, width=wide, highlight=False).print(text)
        elif text is not None:
            click.echo(text)

    def say(self, message: str) -> None:
        """Tell the person something, on stderr."""
        click.echo(message, err=True)

    @contextmanager
    def progress(self, what: str) -> Iterator[Callable[[float, str], None] | None]:
        """A bar for long work, told the share done and what is going on; None when stderr is no terminal."""
        if not sys.stderr.isatty():
            yield None
            return
        columns = (TextColumn("{task.description}"), BarColumn(), TaskProgressColumn(), TimeElapsedColumn())
        with Progress(*columns, TextColumn("{task.fields[now]}"), console=Console(file=sys.stderr)) as bar:
            task = bar.add_task(what, total=1.0, now="")
            yield lambda share, now: bar.update(task, completed=share, now=now)


def with_home(
    function: Callable[Concatenate[Place, P], None],
) -> Callable[P, None]:
    """Give a command ``--home`` and ``--json``, handed to it as a `Place`."""

    @click.option(
        "--home", type=click.Path(path_type=Path), help="Folder of the installation.  [default: $ROLLBOOK_HOME]"
    )
    @click.option("--json", "as_json", is_flag=True, help="Print one JSON document.")
    @wraps(function)
    def command(home: Path | None, as_json: bool, *args: P.args, **kwargs: P.kwargs) -> None:
        function(Place(home, as_json), *args, **kwargs)

    return command  # type: ignore[return-value]  # click fills in what the decorators above take away


def _acting(services: Services) -> Actor:
    """The person whose key is in the settings, or the account that holds the files."""
    key = services.settings.key
    if key is None:
        return Actor("local", _account())
    actor = people.actor_for_key(services, key)
    if actor is None:
        raise NotSignedIn("ROLLBOOK_KEY is no valid key here: correct it, or unset it to act as the local account")
    return actor


def _account() -> str:
    try:
        return getpass.getuser()
    except (KeyError, OSError):
        return str(os.getuid())  # An account without a name, as in many containers.


class Refused(click.ClickException):
    """A refusal as the command line says it: a sentence, then the fields that are wrong, one a line."""

    def __init__(self, refusal: Refusal) -> None:
        super().__init__(refusal.detail)
        self.refusal = refusal

    def show(self, file: Any = None) -> None:
        click.echo(f"Refused: {self.message}", file=file, err=True)
        errors = self.refusal.errors
        if len(errors) == 1 and errors[0].detail in self.message:
            return  # The sentence has said it all.
        for error in errors:
            click.echo(f"  {error.pointer.lstrip('/') or 'the whole'}: {error.detail}", file=file, err=True)
