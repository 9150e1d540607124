"""From runs on the record to the arrays the fit takes: closures, reference points, maps and counts."""

from __future__ import annotations

from collections.abc import Sequence
from copy import copy

import numpy as np

from registry.domain.run import ClosureStatement, Misclosure, Run
from registry.domain.vehicle import Parameters, VehicleVersion
from registry.errors import NotFound
from registry.numerics import closure_map, counters
from registry.numerics.arrays import Float
from registry.numerics.closure import Closures
from registry.numerics.closure_map import ClosureMap
from registry.numerics.stacks import CountsStack, MapStack
from registry.storage import runs as run_store
from registry.storage import vehicles as vehicle_store
from registry.storage.counts_blob import Counts
from registry.storage.engine import Connection


def parameter_array(parameters: Parameters) -> Float:
    """(k_L, k_R, W) in metres."""
    return np.array(parameters.as_tuple())


def parameters_of(array: Float) -> Parameters:
    """The inverse of :func:`parameter_array`."""
    left, right, width = (float(value) for value in array)
    return Parameters(left, right, width)


def closures_of(statements: Sequence[ClosureStatement]) -> Closures:
    """Closures as masked arrays, in the order given."""
    count = len(statements)
    measured, variance = np.zeros((count, 4)), np.ones((count, 4))
    present = np.zeros((count, 4), dtype=np.bool_)
    counted = np.zeros(count, dtype=np.bool_)
    for index, item in enumerate(statements):
        heading = item.heading_rad
        if heading is not None and item.turns is not None:
            heading += 2.0 * np.pi * item.turns
            counted[index] = True
        for column, (value, sd) in enumerate(
            (
                (item.x_m, item.position_sd_m),
                (item.y_m, item.position_sd_m),
                (heading, item.heading_sd_rad),
                (item.distance_m, item.position_sd_m),
            )
        ):
            if value is not None and sd is not None:
                measured[index, column], variance[index, column], present[index, column] = value, sd**2, True
    return Closures(measured, present, variance, counted)


def misclosure_of(row: Float, statement: ClosureStatement) -> Misclosure:
    """One row (4,) of misclosures, with None where the closure has nothing."""
    values = [
        None if measured is None else float(value)
        for value, measured in zip(
            row, (statement.x_m, statement.y_m, statement.heading_rad, statement.distance_m), strict=True
        )
    ]
    return Misclosure(*values)


def levers_of(versions: Sequence[VehicleVersion]) -> Float:
    """Reference points (n, 2) in metres, ahead and left of the axle's middle."""
    points = [version.statement.reference_point for version in versions]
    return np.array([(point.ahead_m, point.left_m) for point in points]).reshape(len(points), 2)


def ticks_of(counts: Counts, bits: int) -> tuple[Float, Float]:
    """Signed increments (n - 1,) of both sides."""
    return counters.increments(counts.left, bits), counters.increments(counts.right, bits)


class Evidence:
    """The runs of one vehicle, read once, ready to be predicted by maps or by counts."""

    def __init__(self, c: Connection, runs: Sequence[Run]) -> None:
        self.runs = tuple(runs)
        self.closures = closures_of([run.closure for run in self.runs])
        self._maps: list[ClosureMap] | None = None
        self._versions: dict[int, VehicleVersion] = {}
        for run in self.runs:
            if run.vehicle_version not in self._versions:
                version = vehicle_store.by_version(c, run.vehicle_id, run.vehicle_version)
                self._versions[run.vehicle_version] = version
        self.levers_m = levers_of([self._versions[run.vehicle_version] for run in self.runs])

    def since(self, begin: int) -> Evidence:
        """The runs from one of them on, with what was read of them already."""
        part = copy(self)
        part.runs = self.runs[begin:]
        part.closures = self.closures.take(np.arange(len(self.runs)) >= begin)
        part.levers_m = self.levers_m[begin:]
        part._maps = None if self._maps is None else self._maps[begin:]
        return part

    def map_stack(self, c: Connection) -> MapStack | None:
        """The stored closure maps, or None when a run has none of this version."""
        if self._maps is None:
            blobs = run_store.maps(c, [run.run_id for run in self.runs])
            if len(blobs) != len(self.runs) or any(blob[0] != closure_map.MAP_VERSION for blob in blobs.values()):
                return None
            self._maps = [closure_map.decode(blobs[run.run_id]) for run in self.runs]
        return MapStack(self._maps, self.levers_m)

    def ticks(self, c: Connection) -> list[tuple[Float, Float]]:
        """The increments of every run, from the stored counts."""
        return [
            ticks_of(run_store.counts(c, run.run_id), self._versions[run.vehicle_version].statement.counter_bits)
            for run in self.runs
        ]

    def counts_stack(self, c: Connection) -> CountsStack:
        """The runs integrated from their counts: exact anywhere, and as slow as the runs are long."""
        return CountsStack(self.ticks(c), self.levers_m)


def refold(c: Connection, evidence: Evidence, centre: Float) -> dict[str, ClosureMap]:
    """New maps of all the runs around other parameters, from the stored counts.

    Raises
    ------
    NotFound
        When the counts of a run are no longer kept.
    """
    if not evidence.runs:
        raise NotFound("there are no runs to fold")
    return {
        run.run_id: closure_map.fold(left, right, centre)
        for run, (left, right) in zip(evidence.runs, evidence.ticks(c), strict=True)
    }
