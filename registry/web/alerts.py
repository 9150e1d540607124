"""The alerts page: what a person must act on, grouped by how soon, and the acknowledging of it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from flask import Blueprint, abort, flash, redirect, render_template, request, url_for
from werkzeug.wrappers import Response

from registry.domain.alert import ALERT_KIND_WORDS, Alert, AlertStanding
from registry.domain.next_step import ACT_WITHIN
from registry.domain.tolerance import QUANTITY_WORDS
from registry.procedures import alerting
from registry.storage import alerts as storage
from registry.storage import vehicles
from registry.web.current import actor, services
from registry.web.figures import count
from registry.web.forms import NoteForm

PAGE = 100

STANDING_WORDS: dict[AlertStanding, str] = {
    "unacknowledged": "Not acknowledged",
    "acknowledged": "Acknowledged, still holds",
    "returned": "No longer holds, not acknowledged",
    "shelved": "Shelved",
    "closed": "Closed",
}


@dataclass(frozen=True)
class Group:
    """Alerts to act on within the same time."""

    title: str
    alerts: tuple[Alert, ...]


def grouped(alerts: Sequence[Alert]) -> list[Group]:
    """Alerts that hold by the time to act within, most urgent first; then those that only want to be seen."""
    holding = [alert for alert in alerts if alert.standing in ("unacknowledged", "acknowledged")]
    groups = [
        Group(within.capitalize(), tuple(alert for alert in holding if alert.content.act_within == within))
        for within in ACT_WITHIN
    ]
    for title, standing in (("No longer holds", "returned"), ("Shelved", "shelved"), ("Closed", "closed")):
        groups.append(Group(title, tuple(alert for alert in alerts if alert.standing == standing)))
    return groups


def summary(alerts: Sequence[Alert]) -> str:
    """The first line: how many ask for something, and how soon."""
    told = [
        f"{len(group.alerts)} {group.title[0].lower()}{group.title[1:]}"
        for group in grouped(alerts)
        if group.alerts and group.title not in ("Shelved", "Closed")
    ]
    return f"{count(len(alerts), 'alert')}: {', '.join(told)}." if told else "Nothing asks for anybody."


def doors(pages: Blueprint) -> None:
    """Put the alerts page on the blueprint."""
    pages.add_url_rule("/alerts", "alerts", _alerts)
    pages.add_url_rule("/alerts/<alert_id>/acknowledgement", "acknowledge", _acknowledge, methods=["POST"])


def _standing() -> Literal["open", "all"]:
    asked = request.args.get("standing", "open")
    if asked == "all":
        return "all"
    if asked != "open":
        abort(404)
    return "open"


def _alerts() -> str:
    return _page({})


def _page(forms: dict[str, NoteForm]) -> str:
    standing = _standing()
    with services().read() as c:
        page = storage.page(c, standing, None, PAGE, request.args.get("after"))
        names = {version.vehicle_id: version.statement.name for version in vehicles.all_current(c)}
    return render_template(
        "alerts.html",
        standing=standing,
        summary=summary([alert for alert in page.items if alert.standing != "closed"]),
        groups=grouped(page.items),
        after=page.after,
        names=names,
        kind_words=ALERT_KIND_WORDS,
        quantity_words=QUANTITY_WORDS,
        standing_words=STANDING_WORDS,
        forms=forms,
        sent=next(iter(forms.values()), None),
        empty_form=note_form,
    )


def note_form(alert_id: str) -> NoteForm:
    """An empty note for one alert; its ids carry the alert's, since a page holds many."""
    return NoteForm(key=f"note-{alert_id}")


def _acknowledge(alert_id: str) -> Response | tuple[str, int]:
    form = NoteForm(request.form, key=f"note-{alert_id}")
    done = form.attempt(lambda: alerting.acknowledge(services(), actor(), alert_id, form.note.data or ""))
    if done is None:
        return _page({alert_id: form}), 422
    flash("Acknowledged. The alert stays until evidence closes it." if done.standing != "closed" else "Acknowledged.")
    return redirect(url_for("web.alerts", _anchor=f"alert-{alert_id}"), 303)
