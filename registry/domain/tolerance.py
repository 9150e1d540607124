"""How far each watched quantity may move from the calibration in force before the vehicle is called out of
tolerance.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Quantity = Literal["tick_factor", "side_ratio", "width"]

#: The three watched quantities, in the order of every array of quantities in the program.
QUANTITIES: tuple[Quantity, Quantity, Quantity] = ("tick_factor", "side_ratio", "width")

QUANTITY_WORDS: dict[Quantity, str] = {
    "tick_factor": "tick factor",
    "side_ratio": "side ratio",
    "width": "effective width",
}


@dataclass(frozen=True)
class Tolerance:
    """Half-widths of the tolerance intervals, relative (0.005 is 0.5 %)."""

    tick_factor: float = 0.005
    side_ratio: float = 0.0015
    width: float = 0.015

    def as_tuple(self) -> tuple[float, float, float]:
        return (self.tick_factor, self.side_ratio, self.width)
