"""``rollbook demo``."""

from __future__ import annotations

import tempfile
from pathlib import Path

import click

from registry.commands import http_server, logs, serving
from registry.commands.session import Place, with_home
from registry.errors import Conflict
from registry.procedures import upkeep
from registry.services import Services, make_services
from seed_demo.build import FEWEST_DAYS, DemoSummary, build_demo


@click.command("demo")
@click.option(
    "--days", default=180, show_default=True, type=click.IntRange(FEWEST_DAYS, 3650), help="Length of the history."
)
@click.option("--port", default=8460, show_default=True, type=click.IntRange(0, 65535), help="0 is any free one.")
@click.option("--build-only", is_flag=True, help="Build the home and leave it, without serving.")
@with_home
def demo(place: Place, days: int, port: int, build_only: bool) -> None:
    """Build an invented fleet with its history, in a temporary home (or in --home, when empty), and serve it."""
    logs.configure()
    address = None if build_only else http_server.free_address("127.0.0.1", port)
    home = _empty(place.home)
    services = make_services(Place(home, place.as_json).settings(create=True), durable=False)
    upkeep.migrate(services)
    with place.progress("Living through the past") as progress:
        built = build_demo(services, days, progress)
    if address is None:
        place.say(f"Built in {home}: {built.vehicles} vehicles, {built.runs} runs, {built.alerts} open alerts.")
        place.say(f"Sign in as {built.sign_in_name} with {built.sign_in_password}.")
        place.answer(_document(services, built))
        return

    def ready() -> None:
        place.answer(_document(services, built) | {"address": address.url()}, address.url())
        place.say(f"{built.vehicles} vehicles, {built.runs} runs, {built.alerts} open alerts, in {home}.")
        place.say(
            f"Open {address.url()} and sign in as {built.sign_in_name} with {built.sign_in_password} (Ctrl+C stops)."
        )

    click.get_current_context().exit(serving.serve_home(services, address, schedule=True, when_ready=ready))


def _empty(home: Path | None) -> Path:
    """A folder for the demo: a new temporary one, or the one named if there is nothing in it."""
    if home is None:
        return Path(tempfile.mkdtemp(prefix="rollbook-demo-"))
    if home.exists() and (not home.is_dir() or any(home.iterdir())):
        raise Conflict(f"{home} is not an empty folder: the demo is built only where nothing can be overwritten")
    return home


def _document(services: Services, built: DemoSummary) -> dict[str, object]:
    return {
        "home": str(services.settings.home),
        "sign_in": {"name": built.sign_in_name, "password": built.sign_in_password},
        "vehicles": built.vehicles,
        "runs": built.runs,
        "alerts": built.alerts,
    }
