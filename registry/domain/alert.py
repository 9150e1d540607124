"""An alert: something a person must act on. One open alert a cause; evidence updates it and evidence closes it."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Literal

from registry.domain.tolerance import Quantity

AlertKind = Literal["beyond_tolerance", "no_evidence", "boot_mismatch", "not_loaded"]
AlertStanding = Literal["unacknowledged", "acknowledged", "returned", "shelved", "closed"]
Priority = Literal["high", "medium", "low"]
ActWithin = Literal["before it drives", "this shift", "this week"]

ALERT_KIND_WORDS: dict[AlertKind, str] = {
    "beyond_tolerance": "beyond tolerance",
    "no_evidence": "no recent run",
    "boot_mismatch": "booted on other parameters",
    "not_loaded": "adopted set not loaded",
}


@dataclass(frozen=True)
class AlertContent:
    """What an alert says. It follows the evidence while the alert is open; the history keeps the first."""

    kind: AlertKind
    quantity: Quantity | None
    message: str
    consequence: str
    advice: str
    priority: Priority
    act_within: ActWithin
    size: float | None = None
    u: float | None = None
    probability_beyond: float | None = None
    onset_at: datetime | None = None
    attribution: str | None = None
    shape: str | None = None

    def cause(self) -> str:
        """Alerts of one vehicle with the same cause are one alert."""
        return self.kind if self.quantity is None else f"{self.kind}:{self.quantity}"


@dataclass(frozen=True)
class AlertEvent:
    """One entry of an alert's history: raised, updated, acknowledged, returned, closed."""

    at: datetime
    recorded_at: datetime
    by: str
    what: str
    note: str | None
    content: AlertContent | None


@dataclass(frozen=True)
class Alert:
    alert_id: str
    vehicle_id: str | None
    content: AlertContent
    standing: AlertStanding
    raised_at: datetime
    recorded_at: datetime
    updated_at: datetime
    history: tuple[AlertEvent, ...] = ()
