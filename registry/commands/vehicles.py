"""``rollbook vehicle add``, ``rollbook history`` and ``rollbook parameters``."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any

import click
from pydantic import ValidationError
from rich.table import Table

from registry.api import boots as boot_answers
from registry.api import calibration_answers, problems, strict_json
from registry.api import maintenance as maintenance_answers
from registry.api.bodies import VehiclePath
from registry.api.vehicles import VehicleBody, described
from registry.clock import utc_text
from registry.commands.session import Place, Session, with_home
from registry.domain.calibration import Calibration, InForce
from registry.errors import FieldError, Invalid
from registry.procedures import authority, boot, registration
from registry.storage import boots, calibrations, maintenance, people, vehicles


@click.group("vehicle")
def vehicle_group() -> None:
    """The register of vehicles."""


@vehicle_group.command("add")
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "--id", "vehicle_id", metavar="ID", help="The vehicle's id.  [default: vehicle_id in FILE, else its name]"
)
@click.option(
    "--change", is_flag=True, help="State a known vehicle anew: old runs keep the version they were driven with."
)
@with_home
def add(place: Place, file: Path, vehicle_id: str | None, change: bool) -> None:
    """Register the vehicle that FILE states: JSON, the body of the HTTP door PUT /vehicles/{vehicle_id}."""
    content = _content(file)
    stated = content.pop("vehicle_id", None)
    identity = vehicle_id or stated or file.stem
    try:
        path, body = VehiclePath.model_validate({"vehicle_id": identity}), VehicleBody.model_validate(content)
    except ValidationError as error:
        raise problems.invalid(error) from error
    session = place.open(create=True)
    seen = "*" if change else None
    version, created = registration.put_vehicle(
        session.services, session.actor, path.vehicle_id, body.statement(), seen
    )
    what = "is registered" if created else f"stands as stated (version {version.version})"
    place.say(f"{version.vehicle_id} {what}.")
    place.answer(described(version) | {"created": created})


def _content(file: Path) -> dict[str, Any]:
    try:
        with file.open("rb") as stream:
            data = stream.read(strict_json.MAX_BODY_BYTES + 1)
    except OSError as error:
        detail = f"cannot be read ({error.strerror})"
        raise Invalid(f"{file} {detail}", (FieldError(str(file), detail),)) from error
    if len(data) > strict_json.MAX_BODY_BYTES:
        raise Invalid(f"{file} is larger than any vehicle's statement", (FieldError(str(file), "name the right file"),))
    return strict_json.parsed(data)


@click.command("history")
@click.argument("vehicle_id", metavar="VEHICLE")
@with_home
def history(place: Place, vehicle_id: str) -> None:
    """Show what VEHICLE was to drive on since when, and every calibration, newest first."""
    session = place.open()
    authority.require(session.actor, "reader")
    with session.services.read() as c:
        vehicles.current(c, vehicle_id)
        held = calibrations.in_force_history(c, vehicle_id)
        made = calibrations.all_for(c, vehicle_id)
        work = maintenance.all_for(c, vehicle_id)
        booted = boots.all_for(c, vehicle_id)
    newest = sorted(made, key=lambda calibration: calibration.number, reverse=True)
    document = {
        "vehicle_id": vehicle_id,
        "items": [calibration_answers.described(calibration) for calibration in newest],
        "in_force": [_entry(entry) for entry in held],
        "maintenance": [maintenance_answers.described(entry) for entry in work],
        "boots": [boot_answers.described(entry) for entry in booted],
    }
    place.answer(document, _table(newest))


def _entry(entry: InForce) -> dict[str, Any]:
    return {
        "calibration_id": entry.calibration_id,
        "calibration_number": entry.number,
        "in_force_from": utc_text(entry.in_force_from),
        "recorded_at": utc_text(entry.recorded_at),
        "recorded_by": entry.recorded_by,
        "reason": entry.reason,
        "entered_late": entry.entered_late,
    }


def _table(newest: list[Calibration]) -> Table:
    table = Table(
        "No.", "Kind", "Standing", "In force from", "Left mm/tick", "Right mm/tick", "Width mm", "Id", box=None
    )
    for calibration in newest:
        values = calibration_answers.described(calibration)
        since = calibration.in_force_from
        table.add_row(
            str(calibration.number),
            calibration.result.kind,
            calibration.standing,
            "" if since is None else utc_text(since),
            *(_with_u(values[name]) for name in ("left_mm_per_tick", "right_mm_per_tick", "width_mm")),
            calibration.calibration_id,
        )
    return table


def _with_u(value: dict[str, float]) -> str:
    return f"{value['value']:.6g} ± {value['u']:.2g}"


@click.command("parameters")
@click.argument("vehicle_id", metavar="VEHICLE")
@with_home
def parameters(place: Place, vehicle_id: str) -> None:
    """Print what VEHICLE is to load, as a file to carry there, tagged under its newest valid key."""
    session = place.open()
    lines = boot.parameters_file(session.services, session.actor, vehicle_id)
    if place.as_json:
        place.answer(_as_json(session, vehicle_id))
        return
    # Byte for byte: the vehicle checks a digest over what stands before its last lines.
    sys.stdout.buffer.write(lines)
    sys.stdout.buffer.flush()


def _as_json(session: Session, vehicle_id: str) -> Any:
    sheet = boot.parameters(session.services, session.actor, vehicle_id)
    with session.services.read() as c:
        key = people.newest_vehicle_key(c, vehicle_id)
    if key is None:
        raise RuntimeError("the key that the file was tagged under is gone")
    return json.loads(boot.render(sheet, bytes.fromhex(key.key_hash))[0])
