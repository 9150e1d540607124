"""``rollbook person add`` and ``rollbook key issue``."""

from __future__ import annotations

import sys

import click

from registry.commands.session import Place, with_home
from registry.domain.person import ROLES, Role
from registry.errors import Malformed
from registry.procedures import people


@click.group("person")
def person_group() -> None:
    """People who sign in."""


@person_group.command("add")
@click.argument("name")
@click.option("--role", type=click.Choice(ROLES), required=True, help="Each role includes the ones before it.")
@click.option("--password-stdin", is_flag=True, help="Read the password from standard input.")
@with_home
def add(place: Place, name: str, role: Role, password_stdin: bool) -> None:
    """Add a person, who then signs in with NAME and a password."""
    session = place.open(create=True)
    person = people.add_person(session.services, session.actor, name, role, _password(password_stdin))
    place.say(f"{person.name} may sign in as {person.role}.")
    place.answer({"name": person.name, "role": person.role})


def _password(from_stdin: bool) -> str:
    if from_stdin:
        try:
            return sys.stdin.readline(10_000).rstrip("\r\n")
        except UnicodeDecodeError as error:
            raise Malformed("the password on standard input is not UTF-8 text") from error
    if not sys.stdin.isatty():
        raise click.UsageError("there is no terminal to ask for the password on: give it with --password-stdin")
    answer: str = click.prompt("Password", hide_input=True, confirmation_prompt=True, err=True)
    return answer


@click.group("key")
def key_group() -> None:
    """API keys of people and vehicles."""


@key_group.command("issue")
@click.option("--person", metavar="NAME", help="A person's key: may do what the person's role may do.")
@click.option(
    "--vehicle", metavar="ID", help="A vehicle's key: reads its own parameters, sends its own runs and boots."
)
@with_home
def issue(place: Place, person: str | None, vehicle: str | None) -> None:
    """Print a new API key, once, alone on standard output. Only its hash is kept."""
    if (person is None) == (vehicle is None):
        raise click.UsageError("name either --person or --vehicle")
    session = place.open()
    key = people.issue_key(session.services, session.actor, person=person, vehicle_id=vehicle)
    place.answer({"key": key, "person": person, "vehicle_id": vehicle}, key)
