"""What a person sees before deciding on a calibration: its numbers, the jump from what is in force, the forms."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from registry.domain.calibration import Calibration, CalibrationResult
from registry.domain.consequence import consequence
from registry.domain.tolerance import QUANTITIES
from registry.domain.vehicle import Parameters
from registry.numerics.observability import deviation, quantity_covariance
from registry.web.figures import decimals, interval, with_uncertainty
from registry.web.forms import AdoptionForm, WithdrawalForm


@dataclass(frozen=True)
class ValueRow:
    """One value of a calibration as written: value, u, 95 % interval, unit, and whether its own runs told it."""

    name: str
    value: str
    u: str
    interval: str
    unit: str
    observed: bool


@dataclass(frozen=True)
class Decision:
    """A calibration with everything a decision needs."""

    calibration: Calibration
    values: tuple[ValueRow, ...]
    jump: tuple[str, ...]
    against: int | None
    adoption: AdoptionForm
    withdrawal: WithdrawalForm
    earlier: tuple[Calibration, ...]

    @property
    def may_adopt(self) -> bool:
        return self.calibration.standing == "proposed"

    @property
    def may_withdraw(self) -> bool:
        return self.calibration.standing in ("proposed", "in force")


def value_rows(result: CalibrationResult) -> tuple[ValueRow, ...]:
    """The values of a calibration in the units of pages, tick factor and side ratio after those of the sides."""
    parameters = result.parameters
    relative = np.array(result.covariance_relative)
    array = np.array(parameters.as_tuple())
    u_left, u_right, u_width = (math.sqrt(relative[i, i]) * value for i, value in enumerate(parameters.as_tuple()))
    watched = quantity_covariance(relative, array)
    u_factor = math.sqrt(watched[0, 0]) * parameters.tick_factor_m_per_tick
    u_ratio = math.sqrt(watched[1, 1])
    seen = result.observed
    sides = seen.tick_factor and seen.side_ratio
    rows = (
        ("Left tick factor", parameters.left_m_per_tick * 1e3, u_left * 1e3, "mm per tick", sides),
        ("Right tick factor", parameters.right_m_per_tick * 1e3, u_right * 1e3, "mm per tick", sides),
        ("Tick factor, mean", parameters.tick_factor_m_per_tick * 1e3, u_factor * 1e3, "mm per tick", seen.tick_factor),
        ("Side ratio", parameters.side_ratio * 1e2, u_ratio * 1e2, "%", seen.side_ratio),
        ("Effective width", parameters.width_m * 1e3, u_width * 1e3, "mm", seen.width),
    )
    return tuple(_row(name, value, u, result.coverage_factor, unit, told) for name, value, u, unit, told in rows)


def _row(name: str, value: float, u: float, coverage: float, unit: str, observed: bool) -> ValueRow:
    written, u_written = with_uncertainty(value, u)
    return ValueRow(name, written, u_written, interval(value, coverage * u), unit, observed)


def value_texts(result: CalibrationResult) -> tuple[str, str, str]:
    """Left, right and width as value and half of the 95 % interval, in the units of pages."""
    left, right, width = (
        " ± ".join(with_uncertainty(value * 1e3, 1e3 * value * result.coverage_factor * math.sqrt(variance)))
        for value, variance in zip(
            result.parameters.as_tuple(), (result.covariance_relative[i][i] for i in range(3)), strict=True
        )
    )
    return left, right, width


def correlations(result: CalibrationResult) -> tuple[tuple[str, str], ...]:
    """Correlation coefficients of the three parameters, by pair."""
    covariance = result.covariance_relative
    pairs = (("left and right", 0, 1), ("left and width", 0, 2), ("right and width", 1, 2))
    told = []
    for name, i, j in pairs:
        scale = math.sqrt(covariance[i][i] * covariance[j][j])
        told.append((name, decimals(covariance[i][j] / scale if scale > 0.0 else 0.0, 2)))
    return tuple(told)


def jump(new: Parameters, held: Parameters) -> tuple[str, ...]:
    """What the vehicle does on ``held`` if ``new`` is true, one consequence a quantity."""
    deviations = deviation(np.array(new.as_tuple()), np.array(held.as_tuple()))
    return tuple(consequence(quantity, float(deviations[i]), held.width_m) for i, quantity in enumerate(QUANTITIES))


def decision_on(
    calibration: Calibration,
    known: Sequence[Calibration],
    adoption: AdoptionForm | None = None,
    withdrawal: WithdrawalForm | None = None,
) -> Decision:
    """Gather what a decision on a calibration needs.

    Parameters
    ----------
    known
        All calibrations of the vehicle.
    adoption, withdrawal
        Forms as they came back; new ones otherwise.
    """
    held = next((one for one in known if one.standing == "in force" and one != calibration), None)
    earlier = tuple(one for one in reversed(known) if one.standing == "superseded" and one.in_force_from)
    identity = calibration.calibration_id
    taking_back = withdrawal or WithdrawalForm(key=f"withdrawal-{identity}")
    taking_back.number.choices = {str(one.number): f"no. {one.number}" for one in earlier}
    return Decision(
        calibration=calibration,
        values=value_rows(calibration.result),
        jump=() if held is None else jump(calibration.result.parameters, held.result.parameters),
        against=None if held is None else held.number,
        adoption=adoption or AdoptionForm(key=f"adoption-{identity}"),
        withdrawal=taking_back,
        earlier=earlier,
    )
