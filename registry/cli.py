"""The command ``rollbook``: a list of commands, each loaded when it is asked for, and one way to say what went wrong.

Exit codes: 0 done, 1 refused or failed, 2 wrong usage.
"""

from __future__ import annotations

import errno
import importlib
import traceback
from collections.abc import Callable
from typing import Any

import click

from registry.commands.session import Refused
from registry.errors import Refusal
from registry.storage.engine import DatabaseError

#: name → module of registry.commands and the command in it. A command imports what only it needs.
_COMMANDS = {
    "demo": ("demo", "demo"),
    "migrate": ("keeping", "migrate"),
    "serve": ("serving", "serve"),
    "worker": ("serving", "worker"),
    "person": ("people", "person_group"),
    "key": ("people", "key_group"),
    "vehicle": ("vehicles", "vehicle_group"),
    "runs": ("runs", "runs_group"),
    "baseline": ("calibrations", "baseline"),
    "adopt": ("calibrations", "adopt"),
    "withdraw": ("calibrations", "withdraw"),
    "evaluate": ("evaluating", "evaluate"),
    "alerts": ("evaluating", "alerts"),
    "history": ("vehicles", "history"),
    "parameters": ("vehicles", "parameters"),
    "check": ("keeping", "check"),
    "backup": ("keeping", "backup"),
}


class _Commands(click.Group):
    """Finds commands by name, and turns refusals into sentences."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        module, name = _COMMANDS[cmd_name]
        command: click.Command = getattr(importlib.import_module(f"registry.commands.{module}"), name)
        return command

    def invoke(self, ctx: click.Context) -> Any:
        return _said(lambda: super(_Commands, self).invoke(ctx))


def _said(call: Callable[[], Any]) -> Any:
    """Every way to fail ends as a sentence. What nobody foresaw keeps its trace, for whoever has to find it."""
    try:
        return call()
    except Refusal as refusal:
        raise Refused(refusal) from refusal
    except DatabaseError as error:
        raise click.ClickException(f"the database cannot be used ({error.orig}): see 'rollbook check'") from error
    except OSError as error:
        if error.errno == errno.EPIPE:
            raise  # Whoever reads has had enough, which click ends without a word.
        what = "a file" if error.filename is None else error.filename
        raise click.ClickException(f"{what} cannot be used ({error.strerror or error})") from error
    except (click.ClickException, click.exceptions.Exit, click.Abort):
        raise
    except Exception as error:
        click.echo(traceback.format_exc(), err=True)
        raise click.ClickException(f"a fault of the program ({type(error).__name__}: {error})") from error


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="rollbook", message="%(version)s")
def main() -> None:
    """A registry of fleet calibrations, with drift monitoring and parameters at boot.

    Every command takes --home DIR and --json. Commands act on the home directly; the API key in
    ROLLBOOK_KEY names the person who acts.
    """
