from __future__ import annotations

import hashlib
import json
from datetime import timedelta
from itertools import pairwise

import pytest

from registry.storage import journal
from registry.storage.journal import JournalFilter


@pytest.fixture
def written(services, clock):
    told = [("Kim", "person added", None), ("Tove", "boot", "tub-7"), ("Tove", "boot", "tub-8")]
    with services.write() as c:
        for i, (who, action, vehicle_id) in enumerate([*told, ("Abel", "adopted", "tub-7")]):
            journal.write(c, clock.move(hours=1), who, action, vehicle_id, {"n": i, "text": "größer"})
    return services


def asked(services, **wanted):
    with services.read() as c:
        return [entry.entry for entry in journal.page(c, JournalFilter(**wanted), 10, None).items]


def test_entries_are_numbered_from_one_and_each_hash_covers_the_one_before(written, clock):
    with written.read() as c:
        entries = journal.page(c, JournalFilter(), 10, None).items
        assert journal.verify(c) == []
    assert [entry.entry for entry in entries] == [4, 3, 2, 1]
    assert entries[3].previous_hash == "0" * 64
    for newer, older in pairwise(entries):
        assert newer.previous_hash == older.hash


def test_the_hash_can_be_recomputed_from_its_description_alone(written, clock):
    with written.read() as c:
        entry = journal.page(c, JournalFilter(), 1, None).items[0]
    microseconds = round(entry.at.timestamp() * 1_000_000)
    told = [entry.previous_hash, 4, microseconds, "Abel", "adopted", "tub-7", '{"n":3,"text":"größer"}']
    text = json.dumps(told, separators=(",", ":"), ensure_ascii=False)
    assert entry.hash == hashlib.sha256(text.encode()).hexdigest()


def test_entries_can_be_asked_by_person_vehicle_action_and_time(written, clock):
    assert asked(written, person="Tove") == [3, 2]
    assert asked(written, vehicle_id="tub-7") == [4, 2]
    assert asked(written, action="boot", vehicle_id="tub-8") == [3]
    assert asked(written, from_at=clock() - timedelta(hours=1)) == [4, 3]
    assert asked(written, to_at=clock() - timedelta(hours=2)) == [2, 1]


@pytest.mark.parametrize(
    ("tampering", "finding"),
    [
        ("UPDATE journal SET what = replace(what, '1', '7') WHERE entry = 2", "entry 2 is not what was written"),
        ("UPDATE journal SET who = 'Kim' WHERE entry = 3", "entry 3 is not what was written"),
        ("UPDATE journal SET at = '2026-01-01 00:00:00.000000' WHERE entry = 1", "entry 1 is not what was written"),
        ("DELETE FROM journal WHERE entry = 2", "entry 2 is missing"),
        ("UPDATE journal SET hash = previous_hash WHERE entry = 2", "entry 3 does not follow"),
    ],
)
def test_an_edited_or_removed_entry_is_found(written, tampering, finding):
    with written.write() as c:
        c.exec_driver_sql(tampering)
    with written.read() as c:
        findings = journal.verify(c)
    assert any(finding in one for one in findings), findings


def test_an_entry_written_after_the_removal_of_the_last_continues_the_chain_that_is_there(written, clock):
    with written.write() as c:
        entry = journal.write(c, clock(), "Kim", "note", None, {})
    assert entry.entry == 5
    with written.read() as c:
        assert journal.verify(c) == []


def test_the_table_is_as_outsiders_rely_on(written):
    with written.read() as c:
        columns = {row[1]: (row[2], row[3], row[5]) for row in c.exec_driver_sql("PRAGMA table_info(journal)")}
    assert columns["entry"] == ("INTEGER", 1, 1)
    assert columns["what"] == ("TEXT", 1, 0)
