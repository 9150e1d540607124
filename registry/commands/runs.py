"""``rollbook runs load``."""

from __future__ import annotations

from pathlib import Path

import click

from registry.api.runs import described
from registry.commands.session import Place, with_home
from registry.procedures.manifest import load_manifest


@click.group("runs")
def runs_group() -> None:
    """Logged runs."""


@runs_group.command("load")
@click.argument("manifest", type=click.Path(path_type=Path))
@with_home
def load(place: Place, manifest: Path) -> None:
    """Load the runs that MANIFEST (CSV, one run a row) names. Loading it again records nothing twice."""
    session = place.open()
    with place.progress("Loading runs") as progress:
        loaded = load_manifest(session.services, session.actor, manifest, progress)
    created = sum(one.created for one in loaded)
    aside = [one for one in loaded if one.run.use == "set aside"]
    place.say(f"{created} runs recorded, {len(loaded) - created} were known, {len(aside)} of all are set aside.")
    for one in aside:
        place.say(f"  row {one.row} ({one.run.run_key}) is set aside: {'; '.join(one.run.reasons)}")
    place.answer(
        {
            "recorded": created,
            "known": len(loaded) - created,
            "set_aside": len(aside),
            "items": [{"row": one.row, "created": one.created, **described(one.run)} for one in loaded],
        }
    )
