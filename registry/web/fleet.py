"""The fleet page: every vehicle a line, grouped by how soon something is to be done."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from flask import Blueprint, render_template

from registry.domain.next_step import ACT_WITHIN
from registry.web.current import services
from registry.web.figures import count
from registry.web.standing import Standing, of_fleet


@dataclass(frozen=True)
class Group:
    """Vehicles with something to do within the same time."""

    title: str
    standings: tuple[Standing, ...]


def grouped(standings: Sequence[Standing]) -> list[Group]:
    """The vehicles by the time to act within, most urgent first, those with nothing to do last."""
    groups = [
        Group(within.capitalize(), tuple(one for one in standings if one.step.act_within == within))
        for within in ACT_WITHIN
    ]
    return [*groups, Group("Nothing to do", tuple(one for one in standings if one.step.act_within is None))]


def summary(groups: Sequence[Group]) -> str:
    """The first line of the page: how many ask for something, and how soon."""
    asking = [group for group in groups[:-1] if group.standings]
    if not asking:
        return "Nothing to do."
    told = [f"{len(group.standings)} {group.title[0].lower()}{group.title[1:]}" for group in asking]
    total = sum(len(group.standings) for group in asking)
    return f"{count(total, 'vehicle')} {'asks' if total == 1 else 'ask'} for something: {', '.join(told)}."


def doors(pages: Blueprint) -> None:
    """Put the fleet page on the blueprint."""
    pages.add_url_rule("/", "fleet", _fleet)


def _fleet() -> str:
    with services().read() as c:
        groups = grouped(of_fleet(c))
    return render_template("fleet.html", groups=groups, summary=summary(groups))
