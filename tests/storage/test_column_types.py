"""What a database would quietly change is refused, and what is stored comes back the same."""

from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta, timezone

import numpy as np
import pytest
from sqlalchemy import Column, MetaData, Table, insert, select
from sqlalchemy.exc import StatementError

from registry.storage.column_types import JsonText, Real, UtcTime, Whole, canonical_json
from registry.storage.engine import make_engine, reading, writing

BOX = Table(
    "box",
    MetaData(),
    Column("at", UtcTime()),
    Column("real", Real()),
    Column("whole", Whole()),
    Column("json", JsonText()),
)


@pytest.fixture
def engine(tmp_path):
    made = make_engine(f"sqlite:///{tmp_path / 'box.db'}")
    with writing(made) as c:
        BOX.create(c)
    yield made
    made.dispose()


def stored(engine, **values):
    with writing(engine) as c:
        c.execute(insert(BOX).values(**values))
    with reading(engine) as c:
        return c.execute(select(BOX)).one()


def test_a_time_comes_back_aware_in_utc_to_the_microsecond(engine):
    at = datetime(2026, 7, 1, 14, 0, 0, 123456, tzinfo=timezone(timedelta(hours=2)))
    row = stored(engine, at=at)
    assert row.at == at
    assert row.at.tzinfo is UTC
    assert row.at.hour == 12


def test_a_time_without_a_zone_is_refused(engine):
    with pytest.raises(StatementError, match="without a zone"):
        stored(engine, at=datetime(2026, 7, 1))  # noqa: DTZ001 - the naive time is the point


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf, np.float64("nan")])
def test_a_number_that_is_not_finite_is_refused_instead_of_stored_as_null(engine, value):
    with pytest.raises(StatementError, match="only finite numbers"):
        stored(engine, real=value)


def test_numbers_of_numpy_are_stored_as_numbers(engine):
    row = stored(engine, real=np.float64(0.1), whole=np.int64(2**62))
    assert (row.real, row.whole) == (0.1, 2**62)
    with reading(engine) as c:
        assert c.exec_driver_sql("SELECT typeof(real), typeof(whole) FROM box").one() == ("real", "integer")


@pytest.mark.parametrize("value", [1.5, True, "3"])
def test_what_is_no_whole_number_is_refused(engine, value):
    with pytest.raises(StatementError, match="no whole number"):
        stored(engine, whole=value)


def test_a_structure_is_stored_as_sorted_json_and_refuses_nan(engine):
    assert stored(engine, json={"b": [1, 2.5], "a": "ä"}).json == {"a": "ä", "b": [1, 2.5]}
    assert canonical_json({"b": 1, "a": "ä"}) == '{"a":"ä","b":1}'
    with pytest.raises(StatementError, match="not JSON compliant"):
        stored(engine, json=[math.nan])


def test_nothing_stays_nothing(engine):
    assert tuple(stored(engine)) == (None, None, None, None)
