"""Calls doors and holds every answer against the document; drives invented vehicles whose truth is known."""

from __future__ import annotations

import json
import math
import re
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any

import jsonschema
from flask import Flask
from werkzeug.test import TestResponse

ROLES = ("reader", "technician", "approver", "keeper")
#: What the invented vehicles truly roll, in millimetres.
LEFT_MM, RIGHT_MM, WIDTH_MM = 0.3490, 0.3501, 622.0

VEHICLE = {
    "name": "Ladle carrier seven",
    "drive": "tracks",
    "site": "North hall",
    "serial": "LC-0007",
    "nominal": {"left_mm_per_tick": 0.35, "right_mm_per_tick": 0.35, "width_mm": 600},
    "counter_bits": 32,
    "max_speed_mm_per_s": 2500,
    "reference_point": {"ahead_mm": 0, "left_mm": 0},
    "tolerance": {"tick_factor_percent": 0.5, "side_ratio_percent": 0.15, "width_percent": 1.5},
}
ENTERED = {
    "kind": "entered",
    "left_mm_per_tick": 0.3477,
    "right_mm_per_tick": 0.3479,
    "width_mm": 620.5,
    "u": {"left_mm_per_tick": 0.00012, "right_mm_per_tick": 0.00013, "width_mm": 0.9},
    "note": "from the sheet of the maker",
}


@dataclass
class Caller:
    """Calls a door and sees that the answer is one that the OpenAPI document describes."""

    app: Flask
    document: dict[str, Any]
    keys: dict[str, str]

    def __call__(
        self, method: str, path: str, who: str | None = "keeper", body: Any = None, **more: Any
    ) -> TestResponse:
        headers = dict(more.pop("headers", {}))
        if who is not None:
            headers.setdefault("Authorization", f"Bearer {self.keys[who]}")
        if body is not None:
            more["data"] = body if isinstance(body, bytes) else json.dumps(body)
            headers.setdefault("Content-Type", "application/json")
        response = self.app.test_client().open(f"/api/v1{path}", method=method, headers=headers, **more)
        self.hold_against_document(method, path, response)
        return response

    def hold_against_document(self, method: str, path: str, response: TestResponse) -> None:
        described = self.operation(method, path)["responses"].get(str(response.status_code))
        assert described is not None, f"{method} {path} answered {response.status_code}, which is not in the document"
        content = described.get("content", {})
        if not content:
            assert response.data == b""
            return
        assert response.mimetype in content, f"{response.mimetype} is not in the document"
        if response.is_json:
            schema = content[response.mimetype]["schema"] | {"components": self.document["components"]}
            checker = jsonschema.FormatChecker()
            jsonschema.Draft202012Validator(schema, format_checker=checker).validate(response.get_json())

    def operation(self, method: str, path: str) -> dict[str, Any]:
        bare = "/api/v1" + path.partition("?")[0]
        for template, item in self.document["paths"].items():
            pattern = re.sub(r"\\\{\w+\\\}", "[^/]+", re.escape(template))
            if re.fullmatch(pattern, bare) and method.lower() in item:
                return item[method.lower()]
        raise AssertionError(f"{method} {path} is not in the document")

    def ok(self, method: str, path: str, who: str | None = "keeper", body: Any = None, **more: Any) -> Any:
        response = self(method, path, who, body, **more)
        assert response.status_code in (200, 201), response.get_data(as_text=True)
        return response.get_json()

    def problem(
        self, status: int, method: str, path: str, who: str | None = "keeper", body: Any = None, **more: Any
    ) -> dict[str, Any]:
        response = self(method, path, who, body, **more)
        assert response.status_code == status, response.get_data(as_text=True)
        assert response.mimetype == "application/problem+json"
        told = response.get_json()
        assert told["status"] == status
        assert told["detail"]
        return told


def pointers(problem: dict[str, Any]) -> list[str]:
    return [error["pointer"] for error in problem["errors"]]


def drive(*legs: tuple[float, float], left_start: int = 100_000, right_start: int = 200_000) -> dict[str, Any]:
    """Log a drive of straight legs and spins (millimetres ahead, degrees turned) at 10 samples a second."""
    x = y = heading = left = right = 0.0
    time_s, lefts, rights = [0.0], [left_start], [right_start]
    for ahead, turn in legs:
        roll = math.radians(turn) * WIDTH_MM / 2
        steps = max(2, math.ceil(max(abs(ahead), abs(roll)) / 60))
        for step in range(1, steps + 1):
            time_s.append(round(time_s[-1] + 0.1, 3))
            lefts.append(left_start + round((left + (ahead - roll) * step / steps) / LEFT_MM))
            rights.append(right_start + round((right + (ahead + roll) * step / steps) / RIGHT_MM))
        left, right = left + ahead - roll, right + ahead + roll
        x, y = x + ahead * math.cos(heading), y + ahead * math.sin(heading)
        heading += math.radians(turn)
    total = math.degrees(heading)
    turns = round(total / 360)
    return {
        "time_s": time_s,
        "left_counts": lefts,
        "right_counts": rights,
        "closure": {
            "x_mm": round(x, 1),
            "y_mm": round(y, 1),
            "heading_deg": round(total - 360 * turns, 2),
            "turns": turns,
            "position_sd_mm": 3.0,
            "heading_sd_deg": 0.15,
        },
    }


#: Drives that together determine every quantity.
COURSES = {
    "straight-a": [(20000, 0)],
    "straight-b": [(18000, 0)],
    "spin-left": [(0, 720)],
    "spin-right": [(0, -720)],
    "square-left": [(4000, 90)] * 4,
    "square-right": [(4000, -90)] * 4,
}


def run(course: str, started_at: datetime, *, jitter_mm: float = 0.0, **more: Any) -> dict[str, Any]:
    """The body of a run over a course; the jitter stands for the reading of the tape."""
    body = drive(*COURSES[course])
    body["closure"]["x_mm"] += jitter_mm
    body["closure"]["y_mm"] -= jitter_mm
    return {"run_key": f"{course}-{started_at:%d%H%M}", "started_at": started_at.isoformat(), **body, **more}


def record_runs(call: Caller, until: datetime) -> list[dict[str, Any]]:
    """Two runs of LC-07 over every course, in the hours before a time."""
    recorded = []
    for index, course in enumerate([*COURSES, *COURSES]):
        started_at = until - timedelta(hours=1 + index / 4)
        body = run(course, started_at, jitter_mm=(-1.0, 0.5, 1.5)[index % 3])
        recorded.append(call.ok("POST", "/vehicles/LC-07/runs", "LC-07", body))
    return recorded
