"""``rollbook migrate``, ``rollbook check`` and ``rollbook backup``."""

from __future__ import annotations

from pathlib import Path

import click

from registry.commands.session import Place, with_home
from registry.procedures import upkeep
from registry.services import make_services


@click.command("migrate")
@with_home
def migrate(place: Place) -> None:
    """Create the database, or bring it up to date."""
    services = make_services(place.settings(create=True))
    revision = upkeep.migrate(services)
    place.say(f"The database in {services.settings.home} is at revision {revision}.")
    place.answer({"home": str(services.settings.home), "revision": revision})


@click.command("check")
@with_home
def check(place: Place) -> None:
    """Check the journal's chain, foreign keys, stored digests and the schema. Exit code 1 when something is wrong."""
    session = place.open()
    findings = upkeep.check(session.services)
    place.answer({"findings": findings}, "\n".join(findings) if findings else None)
    place.say(f"{len(findings)} findings." if findings else "Nothing is wrong.")
    if findings:
        click.get_current_context().exit(1)


@click.command("backup")
@click.argument("file", type=click.Path(path_type=Path))
@with_home
def backup(place: Place, file: Path) -> None:
    """Write a consistent copy of the database to FILE, also while serving."""
    session = place.open()
    upkeep.backup(session.services, file)
    place.say(f"The database is copied to {file}.")
    place.answer({"file": str(file.absolute()), "bytes": file.stat().st_size})
