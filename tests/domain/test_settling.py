"""Which run would settle what the runs at hand leave open."""

from __future__ import annotations

import pytest

from registry.domain.settling import SETTLING_RUN, cannot_tell
from registry.domain.tolerance import QUANTITIES


def test_runs_that_tell_everything_need_no_sentence() -> None:
    assert cannot_tell((True, True, True)) == ""


@pytest.mark.parametrize(("index", "words"), [(0, "tick factor"), (1, "side ratio"), (2, "effective width")])
def test_one_open_quantity_is_named_with_its_own_run(index: int, words: str) -> None:
    seen = tuple(place != index for place in range(3))
    told = cannot_tell((seen[0], seen[1], seen[2]))
    assert told == f"These runs cannot tell {words}: {SETTLING_RUN[QUANTITIES[index]]}."


def test_several_open_quantities_are_named_in_one_sentence_with_every_run() -> None:
    told = cannot_tell((False, True, False))
    assert told.startswith("These runs cannot tell tick factor or effective width: ")
    assert told.endswith(f"{SETTLING_RUN['tick_factor']}; {SETTLING_RUN['width']}.")


def test_every_settling_run_is_an_instruction_to_drive_and_measure() -> None:
    for quantity in QUANTITIES:
        assert SETTLING_RUN[quantity].split()[0] in ("drive", "turn")
        assert "measure" in SETTLING_RUN[quantity]
