"""Which run would settle a quantity that the runs at hand do not tell."""

from __future__ import annotations

from registry.domain.tolerance import QUANTITIES, QUANTITY_WORDS, Quantity

SETTLING_RUN: dict[Quantity, str] = {
    "tick_factor": "drive a straight of 10 m or more and measure the distance from start to end",
    "side_ratio": "drive a straight of 10 m or more and measure how far to the side it ends and its heading",
    "width": "turn on the spot three or more whole turns, count them and measure the heading at the end",
}


def cannot_tell(observed: tuple[bool, bool, bool]) -> str:
    """One sentence on what these runs do not tell and which run would; empty when they tell everything."""
    missing: list[Quantity] = [name for name, seen in zip(QUANTITIES, observed, strict=True) if not seen]
    if not missing:
        return ""
    runs = "; ".join(dict.fromkeys(SETTLING_RUN[name] for name in missing))
    return f"These runs cannot tell {' or '.join(QUANTITY_WORDS[name] for name in missing)}: {runs}."
