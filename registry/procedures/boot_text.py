"""The text of what a vehicle loads at boot: the lines that the digest covers, the JSON answer, and the tag on both."""

from __future__ import annotations

import hashlib
import hmac
import json
import unicodedata
from math import sqrt

from registry.clock import utc_text
from registry.domain.boot import BootSheet, Condition
from registry.domain.calibration import Calibration, InForce
from registry.domain.vehicle import VehicleVersion

_QUANTITIES = ("left_mm_per_tick", "right_mm_per_tick", "width_mm")


def sheet_of(
    version: VehicleVersion, entry: InForce, calibration: Calibration, condition: Condition, reasons: tuple[str, ...]
) -> BootSheet:
    """Write the sheet of a vehicle for a calibration in force."""
    values_mm = dict(zip(_QUANTITIES, _in_mm(calibration), strict=True))
    u_mm = dict(zip(_QUANTITIES, _u_in_mm(calibration), strict=True))
    counting = dict(sorted(version.counting().items()))
    in_force_from = utc_text(entry.in_force_from)
    lines: list[tuple[str, object]] = [
        ("VEHICLE_ID", version.vehicle_id),
        ("CALIBRATION_NUMBER", calibration.number),
        ("IN_FORCE_FROM", in_force_from),
        *((name.upper(), value) for name, value in values_mm.items()),
        *((f"U_{name.upper()}", value) for name, value in u_mm.items()),
        *((f"COUNTING_{name.upper()}", value) for name, value in counting.items()),
    ]
    head = "".join(f"{name}={_line_text(value)}\n" for name, value in lines)
    digest = hashlib.sha256(head.encode()).hexdigest()
    answer = {
        "vehicle_id": version.vehicle_id,
        "calibration_number": calibration.number,
        "in_force_from": in_force_from,
        **values_mm,
        "u": u_mm,
        "counting": {name: rounded(value) for name, value in counting.items()},
        "condition": condition,
        "reasons": list(reasons),
        "digest": digest,
    }
    return BootSheet(
        vehicle_id=version.vehicle_id,
        calibration_id=calibration.calibration_id,
        calibration_number=calibration.number,
        head=head,
        digest=digest,
        condition=condition,
        reasons=reasons,
        answer=json.dumps(answer, ensure_ascii=False, allow_nan=False).removesuffix("}"),
    )


def tag_of(sheet: BootSheet, key32: bytes) -> str:
    """Lower-case hex HMAC-SHA-256 of digest and vehicle under the 32 raw bytes SHA-256(API key)."""
    return hmac.digest(key32, f"{sheet.digest}{sheet.vehicle_id}".encode(), "sha256").hex()


def render(sheet: BootSheet, key32: bytes) -> tuple[bytes, str]:
    """The JSON answer under a key, and its entity tag (hex, without quotes), which changes with any byte of it."""
    body = f'{sheet.answer}, "tag": "{tag_of(sheet, key32)}"}}'.encode()
    return body, etag_of(body)


def render_lines(sheet: BootSheet, key32: bytes) -> bytes:
    """The same as lines ``NAME=VALUE``, as sent to a small controller or carried as a file."""
    reasons = _line_text("; ".join(sheet.reasons))
    tail = f"CONDITION={sheet.condition}\nREASONS={reasons}\nDIGEST={sheet.digest}\nTAG={tag_of(sheet, key32)}\n"
    return f"{sheet.head}{tail}".encode()


def etag_of(body: bytes) -> str:
    """An entity tag (hex, without quotes) that changes with any byte of a body."""
    return hashlib.sha256(body).hexdigest()[:32]


def rounded(value: object) -> object:
    """A number as both forms carry it, twelve significant digits; anything else as it is."""
    return float(f"{value:.12g}") if isinstance(value, float) else value


def _in_mm(calibration: Calibration) -> list[object]:
    return [rounded(1000.0 * value) for value in calibration.result.parameters.as_tuple()]


def _u_in_mm(calibration: Calibration) -> list[object]:
    """Standard uncertainties: the square roots of the relative variances, times the values."""
    covariance = calibration.result.covariance_relative
    values = calibration.result.parameters.as_tuple()
    return [rounded(1000.0 * value * sqrt(covariance[i][i])) for i, value in enumerate(values)]


def _line_text(value: object) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "1" if value else "0"
    if isinstance(value, float):
        return f"{value:.12g}"
    return "".join(" " if unicodedata.category(letter) == "Cc" else letter for letter in str(value))
