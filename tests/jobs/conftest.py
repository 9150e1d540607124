"""The jobs are tested on the vehicles that drive in the tests of the procedures."""

from __future__ import annotations

from tests.procedures.conftest import calibrated, calibrated_file, driven_file, make_calibrated

__all__ = ["calibrated", "calibrated_file", "driven_file", "make_calibrated"]
