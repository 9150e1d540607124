"""How numbers and times are written on pages: mm, degrees, percent, two significant digits of an uncertainty, UTC."""

from __future__ import annotations

import math
from datetime import UTC, datetime

from registry.domain.run import Misclosure

MINUS = "\N{MINUS SIGN}"
DASH = "\N{EN DASH}"
UNKNOWN = "not measured"


def decimals(value: float, places: int) -> str:
    """``value`` with a fixed number of decimals, a true minus sign, and never a negative zero."""
    text = f"{value:,.{places}f}"
    if float(text.replace(",", "")) == 0.0:
        text = text.lstrip("-")
    return text.replace("-", MINUS)


def places_for(u: float, significant: int = 2) -> int:
    """Decimals that show ``significant`` digits of an uncertainty; 0 for whole numbers and larger."""
    if not math.isfinite(u) or u <= 0.0:
        return 4
    first = math.floor(math.log10(u))
    # 0.0996 rounds to 0.10, one place earlier than its own first digit says.
    if round(u, significant - 1 - first) >= 10.0 ** (first + 1):
        first += 1
    return max(0, significant - 1 - first)


def with_uncertainty(value: float, u: float) -> tuple[str, str]:
    """Value and uncertainty written to the same place, two significant digits of the uncertainty."""
    places = places_for(u)
    return decimals(value, places), decimals(u, places)


def interval(value: float, expanded: float) -> str:
    """``low to high`` of an interval, written to the place of its half-width."""
    places = places_for(expanded)
    return f"{decimals(value - expanded, places)} to {decimals(value + expanded, places)}"


def millimetres(length_m: float | None, places: int = 1) -> str:
    """A length in millimetres with its unit, or that it was not measured."""
    return UNKNOWN if length_m is None else f"{decimals(length_m * 1000.0, places)} mm"


def metres(length_m: float) -> str:
    """A length in metres with its unit, one decimal."""
    return f"{decimals(length_m, 1)} m"


def degrees(angle_rad: float | None, places: int = 2) -> str:
    """An angle in degrees with its sign, or that it was not measured."""
    return UNKNOWN if angle_rad is None else f"{decimals(math.degrees(angle_rad), places)}°"


def percent(fraction: float | None, places: int = 2) -> str:
    """A fraction in percent; an en dash where there is none."""
    return DASH if fraction is None else f"{decimals(fraction * 100.0, places)} %"


def moment(at: datetime | None) -> str:
    """A time in UTC to the minute; an en dash where there is none."""
    return DASH if at is None else at.astimezone(UTC).strftime("%Y-%m-%d %H:%M")


def day(at: datetime | None) -> str:
    """The UTC day of a time; an en dash where there is none."""
    return DASH if at is None else at.astimezone(UTC).strftime("%Y-%m-%d")


def stamp(at: datetime) -> str:
    """A time for machines: RFC 3339 in UTC."""
    return at.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def span(seconds: float) -> str:
    """A duration in the unit a person would use."""
    if seconds < 120.0:
        return f"{decimals(seconds, 0)} s"
    if seconds < 7200.0:
        return f"{decimals(seconds / 60.0, 0)} min"
    if seconds < 2.0 * 86400.0:
        return f"{decimals(seconds / 3600.0, 0)} h"
    return f"{decimals(seconds / 86400.0, 0)} days"


def count(number: int, one: str, many: str | None = None) -> str:
    """``1 run``, ``3 runs``."""
    return f"{number:,} {one if number == 1 else (many or one + 's')}"


def closing_words(error: Misclosure | None) -> str:
    """A closing error in a few words: how far from the mark it ended, and how far off in heading or distance."""
    if error is None:
        return UNKNOWN
    told = []
    if error.x_m is not None and error.y_m is not None:
        told.append(f"{millimetres(math.hypot(error.x_m, error.y_m), 0)} from the mark")
    else:
        told += [
            f"{millimetres(value, 0)} {where}"
            for value, where in ((error.x_m, "ahead"), (error.y_m, "to the left"))
            if value is not None
        ]
    if error.distance_m is not None:
        told.append(f"{millimetres(error.distance_m, 0)} in distance")
    if error.heading_rad is not None:
        told.append(f"{degrees(error.heading_rad)} in heading")
    return ", ".join(told) or UNKNOWN


def who(actor: str) -> str:
    """Who did it, as people would say: a name, the schedule, a vehicle itself, the console."""
    kind, _, name = actor.partition(":")
    if kind == "vehicle" and name:
        return f"vehicle {name}"
    return {"schedule": "the schedule", "local": "the console"}.get(kind, actor)


def without_name(message: str, name: str) -> str:
    """A message about a vehicle as said where its name stands above already."""
    told = message.removeprefix(f"{name}: ")
    return told[:1].upper() + told[1:]
