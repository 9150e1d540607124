"""What a deviation does on the floor, in the words people use there.

A *deviation* is always the true parameter relative to the one the vehicle drives on, minus one. The vehicle counts
ticks and believes its parameters, so:

* true tick factor larger: every tick rolls further than believed. Told to drive 10 m, it *overshoots*.
* true side ratio larger: the right side rolls further than believed. Told to drive straight it turns
  counter-clockwise: it *pulls left*. Over a distance D the heading changes by ``eps D / W`` and the vehicle ends
  ``eps D² / (2 W)`` to the side.
* true effective width larger: the same difference of the sides turns the vehicle less. Told to make a full turn, it
  *turns short*.

Headings counter-clockwise positive, x ahead, y to the left.
"""

from __future__ import annotations

import math

from registry.domain.tolerance import Quantity

#: The stretch that people think in: long enough to see a fault, short enough for any hall.
STRETCH_M = 10.0


def distance_error_m(deviation: float, distance_m: float = STRETCH_M) -> float:
    """How much further than told the vehicle drives (m); negative is short."""
    return deviation * distance_m


def heading_error_rad(deviation: float, width_m: float, distance_m: float = STRETCH_M) -> float:
    """How far the vehicle turns (rad, counter-clockwise positive) while it believes that it drives straight."""
    return deviation * distance_m / width_m


def side_error_m(deviation: float, width_m: float, distance_m: float = STRETCH_M) -> float:
    """How far to the left (m) the vehicle ends while it believes that it drives straight; for small turns."""
    return deviation * distance_m**2 / (2.0 * width_m)


def turn_error_rad(deviation: float) -> float:
    """How much further than a full turn the vehicle turns (rad) when told to make one; negative is short."""
    return 2.0 * math.pi * (1.0 / (1.0 + deviation) - 1.0)


def _length_words(length_m: float) -> str:
    millimetres = abs(length_m) * 1000.0
    return f"{millimetres:.1f} mm" if round(millimetres, 1) < 10.0 else f"{millimetres:,.0f} mm"


def _angle_words(angle_rad: float) -> str:
    degrees = abs(math.degrees(angle_rad))
    return f"{degrees:.2f}°" if degrees < 1.0 else f"{degrees:.1f}°"


def tick_factor_words(deviation: float) -> str:
    """Consequence of a deviation of the mean tick factor: ``overshoots 50 mm in 10 m``."""
    error_m = distance_error_m(deviation)
    if abs(error_m) < 0.5e-4:
        return "drives true to length"
    verb = "overshoots" if error_m > 0.0 else "falls short"
    return f"{verb} {_length_words(error_m)} in 10 m"


def side_ratio_words(deviation: float, width_m: float) -> str:
    """Consequence of a deviation of the side ratio for a vehicle ``width_m`` wide: ``pulls left 115 mm in 10 m``.

    A vehicle that turns by more than a radian over the stretch no longer has a side offset worth naming: then the turn
    is said.
    """
    heading_rad = heading_error_rad(deviation, width_m)
    error_m = side_error_m(deviation, width_m)
    if abs(error_m) < 0.5e-4:
        return "drives straight"
    side = "left" if error_m > 0.0 else "right"
    if abs(heading_rad) > 1.0:
        return f"curves {side} by {_angle_words(heading_rad)} in 10 m"
    return f"pulls {side} {_length_words(error_m)} in 10 m"


def width_words(deviation: float) -> str:
    """Consequence of a deviation of the effective width: ``turns 5.3° short per full turn``."""
    error_rad = turn_error_rad(deviation)
    if abs(math.degrees(error_rad)) < 0.005:
        return "turns true"
    return f"turns {_angle_words(error_rad)} {'too far' if error_rad > 0.0 else 'short'} per full turn"


def consequence(quantity: Quantity, deviation: float, width_m: float) -> str:
    """What a deviation of one watched quantity does on the floor.

    Parameters
    ----------
    quantity
        Which of the three watched quantities deviates.
    deviation
        True value relative to what the vehicle drives on, minus one. For the side ratio:
        ``(1 + true) / (1 + believed) - 1``.
    width_m
        Effective width of the vehicle in metres.
    """
    if quantity == "tick_factor":
        return tick_factor_words(deviation)
    if quantity == "side_ratio":
        return side_ratio_words(deviation, width_m)
    return width_words(deviation)
