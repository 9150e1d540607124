"""``rollbook baseline``, ``rollbook adopt`` and ``rollbook withdraw``."""

from __future__ import annotations

from typing import Any

import click

from registry.api import calibration_answers
from registry.api.calibration_answers import described
from registry.commands.session import Place, with_home
from registry.domain.calibration import Calibration
from registry.procedures import adoption
from registry.procedures.baseline import propose_baseline


@click.command("baseline")
@click.argument("vehicle_id", metavar="VEHICLE")
@click.option("--note", help="What the record should say beside it.")
@with_home
def baseline(place: Place, vehicle_id: str, note: str | None) -> None:
    """Fit VEHICLE's usable runs since the last maintenance that ends the window, and propose a baseline."""
    session = place.open()
    proposed = propose_baseline(session.services, session.actor, vehicle_id, None, note)
    place.answer(described(proposed), _text(proposed))
    place.say(f"Proposed. To put it into force: rollbook adopt {proposed.calibration_id} --reason TEXT")


def _text(calibration: Calibration) -> str:
    values = described(calibration)
    result = calibration.result
    lines = [f"calibration {calibration.number} of {calibration.vehicle_id}, from {values['runs_used']} runs"]
    for name, said, unit in (
        ("left_mm_per_tick", "left", "mm/tick"),
        ("right_mm_per_tick", "right", "mm/tick"),
        ("width_mm", "width", "mm"),
        ("tick_factor_mm_per_tick", "tick factor", "mm/tick"),
        ("side_ratio_percent", "side ratio", "%"),
    ):
        lines.append(f"  {said:<12} {values[name]['value']:.6g} ± {values[name]['u']:.2g} {unit}")
    copied = [name for name, seen in vars(result.observed).items() if not seen]
    if copied:
        lines.append(f"  not observed, copied from the calibration in force: {', '.join(copied)}")
    lines.append(f"  coverage factor for 95 %: {result.coverage_factor:.3g}")
    if result.birge_ratio is not None:
        lines.append(f"  Birge ratio: {result.birge_ratio:.3g}")
    return "\n".join(lines)


@click.command("adopt")
@click.argument("calibration_id", metavar="CALIBRATION")
@click.option("--reason", required=True, help="Why, for those who read the record later.")
@click.option("--number", type=int, help="The calibration's own number, to be sure that it is the one meant.")
@with_home
def adopt(place: Place, calibration_id: str, reason: str, number: int | None) -> None:
    """Put CALIBRATION (its id) into force."""
    session = place.open()
    done = adoption.adopt(session.services, session.actor, calibration_id, reason, number=number)
    place.say(f"Calibration {done.number} is in force on {done.vehicle_id}.")
    place.answer(described(done))


@click.command("withdraw")
@click.argument("calibration_id", metavar="CALIBRATION")
@click.option("--reason", required=True, help="Why, for those who read the record later.")
@click.option(
    "--reinstate", "number", type=int, metavar="NUMBER", help="The earlier calibration that is to hold again."
)
@with_home
def withdraw(place: Place, calibration_id: str, reason: str, number: int | None) -> None:
    """Take CALIBRATION (its id) back. Without --reinstate the vehicle then has nothing to load."""
    session = place.open()
    then = "nothing" if number is None else "reinstate"
    done = adoption.withdraw(session.services, session.actor, calibration_id, reason, then, number)
    place.say(_withdrawn(done))
    document: dict[str, Any] = calibration_answers.withdrawn(done)
    place.answer(document)


def _withdrawn(done: adoption.Withdrawal) -> str:
    taken = done.calibration
    holds = "nothing is" if done.in_force is None else f"calibration {done.in_force.number} is"
    loaded = f" Vehicles that loaded it: {', '.join(done.loaded_by)}." if done.loaded_by else ""
    return f"Calibration {taken.number} is withdrawn; {holds} in force on {taken.vehicle_id} now.{loaded}"
