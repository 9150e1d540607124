"""``rollbook evaluate`` and ``rollbook alerts``."""

from __future__ import annotations

from collections.abc import Callable
from datetime import timedelta
from typing import Any, TypeVar

import click
from rich.table import Table

from registry.api.alerts import described
from registry.clock import duration_s, parse_time, utc_text
from registry.commands.session import Place, with_home
from registry.domain.alert import ALERT_KIND_WORDS, Alert
from registry.domain.tolerance import QUANTITY_WORDS
from registry.jobs import fleet_pass
from registry.jobs.fleet_pass import PassOutcome
from registry.procedures import authority
from registry.storage import alerts as stored

_PAGE = 1000
_T = TypeVar("_T")


def _read(option: str, text: str | None, parse: Callable[[str], _T]) -> _T | None:
    """The value of an option; a malformed one is wrong usage."""
    if text is None:
        return None
    try:
        return parse(text)
    except ValueError as error:
        raise click.BadParameter(str(error), param_hint=f"--{option}") from error


def _span(text: str) -> timedelta:
    return timedelta(seconds=duration_s(text))


@click.command("evaluate")
@click.argument("vehicle_ids", metavar="[VEHICLE]...", nargs=-1)
@click.option("--as-of", metavar="TIME", help="Judge as of this time, with everything known now.")
@click.option("--from", "from_", metavar="TIME", help="Replay the past from this time …")
@click.option("--to", metavar="TIME", help="… up to this one …")
@click.option("--every", metavar="SPAN", help="… in these steps, such as 1d or 6h.")
@with_home
def evaluate(
    place: Place,
    vehicle_ids: tuple[str, ...],
    as_of: str | None,
    from_: str | None,
    to: str | None,
    every: str | None,
) -> None:
    """Look at the recent runs of each VEHICLE (default: all), once, or as the schedule would have in the past."""
    span = (from_, to, every)
    if any(part is not None for part in span) and (as_of is not None or None in span):
        raise click.UsageError("a replay takes --from, --to and --every together, and no --as-of")
    since, until, step = _read("from", from_, parse_time), _read("to", to, parse_time), _read("every", every, _span)
    moment = _read("as-of", as_of, parse_time)
    session = place.open()
    authority.require(session.actor, "technician")
    wanted = vehicle_ids or None
    with place.progress("Evaluating") as bar:
        tell = None if bar is None else lambda done, of, what: bar(done / of, what)
        if since is not None and until is not None and step is not None:
            passes = fleet_pass.replay(session.services, since, until, step, wanted, tell)
        else:
            passes = [fleet_pass.run_pass(session.services, moment, wanted, tell)]
    place.say(_said(passes))
    place.answer({"passes": [_pass(outcome) for outcome in passes]})


def _said(passes: list[PassOutcome]) -> str:
    evaluated = sum(outcome.evaluated for outcome in passes)
    last = passes[-1]
    many = f"{len(passes)} passes" if len(passes) > 1 else "One pass"
    return f"{many}: {last.looked_at} vehicles looked at, {evaluated} evaluations, {last.alerts_open} alerts open."


def _pass(outcome: PassOutcome) -> dict[str, Any]:
    return {
        "as_of": utc_text(outcome.as_of),
        "looked_at": outcome.looked_at,
        "evaluated": outcome.evaluated,
        "findings": outcome.findings,
        "alerts_open": outcome.alerts_open,
    }


@click.command("alerts")
@click.option("--open", "only_open", is_flag=True, help="Leave closed ones out.")
@with_home
def alerts(place: Place, only_open: bool) -> None:
    """List alerts, newest first."""
    session = place.open()
    authority.require(session.actor, "reader")
    found: list[Alert] = []
    after = None
    with session.services.read() as c:
        while True:
            page = stored.page(c, "open" if only_open else "all", None, _PAGE, after)
            found.extend(page.items)
            after = page.after
            if after is None:
                break
    place.answer({"items": [described(alert) for alert in found], "after": None}, _table(found))


def _table(found: list[Alert]) -> Table | str:
    if not found:
        return "No alerts."
    table = Table("Raised", "Vehicle", "What", "Standing", "Act within", "Message", box=None)
    for alert in found:
        content = alert.content
        quantity = "" if content.quantity is None else f", {QUANTITY_WORDS[content.quantity]}"
        table.add_row(
            utc_text(alert.raised_at.replace(microsecond=0)),
            alert.vehicle_id or "",
            ALERT_KIND_WORDS[content.kind] + quantity,
            alert.standing,
            content.act_within,
            content.message,
        )
    return table
