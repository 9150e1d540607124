"""``rollbook serve`` and ``rollbook worker``."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import click

from registry.commands import http_server, logs
from registry.commands.session import Place, with_home
from registry.jobs.scheduler import Schedule, start_schedule, work_until_signal
from registry.services import Services

WORKERS = 2
THREADS = 4


@dataclass
class _Running:
    """The schedule of this process, once it runs."""

    schedules: list[Schedule] = field(default_factory=list)

    def start(self, services: Services) -> None:
        self.schedules.append(start_schedule(services))

    def stop(self) -> None:
        for schedule in self.schedules:
            schedule.stop()


def serve_home(
    services: Services, address: http_server.Address, *, schedule: bool, when_ready: Callable[[], None]
) -> int:
    """
    Serve a home until a signal, with the schedule in this process.

    Returns
    -------
    int
        The exit code.
    """
    running = _Running()

    def ready() -> None:
        if schedule:
            running.start(services)
        when_ready()

    try:
        return http_server.run(services.settings.home, address, WORKERS, THREADS, ready)
    finally:
        running.stop()


@click.command("serve")
@click.option("--host", default="127.0.0.1", show_default=True, help="Address to listen at.")
@click.option("--port", default=8460, show_default=True, type=click.IntRange(0, 65535), help="0 is any free one.")
@click.option("--no-schedule", is_flag=True, help="Leave evaluations to 'rollbook worker'.")
@with_home
def serve(place: Place, host: str, port: int, no_schedule: bool) -> None:
    """Serve the web view and the API, with the schedule, until stopped."""
    logs.configure()
    session = place.open(create=True)
    address = http_server.free_address(host, port)

    def ready() -> None:
        place.answer({"address": address.url(), "home": str(session.services.settings.home)}, address.url())
        place.say(f"Serving {session.services.settings.home} at {address.url()} (Ctrl+C stops).")

    code = serve_home(session.services, address, schedule=not no_schedule, when_ready=ready)
    click.get_current_context().exit(code)


@click.command("worker")
@with_home
def worker(place: Place) -> None:
    """Run the schedule alone until stopped. Several may run: one works at a time."""
    logs.configure()
    session = place.open(create=True)
    work_until_signal(session.services, lambda: place.say("The schedule runs (Ctrl+C stops)."))
