"""What outlives a boot: the kept copy, withdrawn numbers, carried files, unsent reports, and disks that fail."""

from __future__ import annotations

import json
import re
import socket
import subprocess
import sys
import time
from pathlib import Path

import pytest

from tests.vehicle.conftest import CLIENT, KEY, NOT_MODIFIED, Server, Vehicle, lines, problem, reply, said


def _nothing(*withdrawn: int) -> bytes:
    return problem("nothing-in-force", "404 Not Found", withdrawn_numbers=list(withdrawn))


def test_a_withdrawn_number_is_not_brought_back_by_a_network_failure(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines())
    assert vehicle.boot(server.url).returncode == 0
    server.parameters = _nothing(5, 7)
    done = vehicle.boot(server.url)
    assert (done.returncode, done.stdout) == (30, b"")
    assert "(withdrawn: 5, 7)" in said(done)
    for _ in range(2):
        done = vehicle.boot(dead_url)
        assert (done.returncode, done.stdout) == (30, b"")
        assert "last word was that nothing is in force" in said(done)


def test_nothing_in_force_holds_even_when_no_number_was_named(server: Server, vehicle: Vehicle, dead_url: str) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    server.parameters = problem("nothing-in-force", "404 Not Found", withdrawn_numbers="all of them")
    assert vehicle.boot(server.url).returncode == 30
    assert vehicle.boot(dead_url).returncode == 30


def test_a_new_calibration_ends_the_standstill_but_the_withdrawn_number_never_returns(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    server.parameters = _nothing(7)
    vehicle.boot(server.url)
    server.parameters = reply(lines(number=8))
    assert vehicle.boot(server.url).returncode == 0
    assert vehicle.boot(dead_url).stdout == lines(number=8)
    server.parameters = reply(lines(number=7))
    done = vehicle.boot(server.url)
    assert done.returncode == 40
    assert "names calibration 7, which was withdrawn" in said(done)


def test_the_same_number_again_after_nothing_in_force_is_loaded_when_it_was_not_withdrawn(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    server.parameters = _nothing(3)
    assert vehicle.boot(server.url).returncode == 30
    server.parameters = NOT_MODIFIED
    assert vehicle.boot(server.url).returncode == 0
    assert vehicle.boot(dead_url).returncode == 20


def test_a_registry_set_back_to_an_older_number_is_loaded_and_said(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines(number=8))
    vehicle.boot(server.url)
    server.parameters = reply(lines(number=7))
    done = vehicle.boot(server.url)
    assert (done.returncode, done.stdout) == (0, lines(number=7))
    assert "although the later calibration 8 was loaded before" in said(done)


def test_a_carried_file_is_loaded_without_network_and_then_kept(vehicle: Vehicle, dead_url: str) -> None:
    carried = vehicle.write("carried", lines(condition="provisional"))
    for url in (None, dead_url):
        done = vehicle.boot(url, "--carried", carried)
        assert (done.returncode, done.stdout) == (20, lines(condition="provisional"))
        assert "which is provisional" in said(done)
    done = vehicle.boot(dead_url)
    assert (done.returncode, done.stdout) == (20, lines(condition="provisional"))
    assert re.search(r"carried in \d+ s ago", said(done))


def test_the_registry_goes_before_a_carried_file(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines(number=7))
    carried = vehicle.write("carried", lines(number=9))
    assert vehicle.boot(server.url, "--carried", carried).stdout == lines(number=7)
    server.parameters = _nothing()
    assert vehicle.boot(server.url, "--carried", carried).returncode == 30


@pytest.mark.parametrize(
    ("content", "sentence"),
    [
        (lines("AGV-08", key="key-of-eight"), "is for vehicle AGV-08, not AGV-07"),
        (lines("AGV-08"), "is for vehicle AGV-08, not AGV-07"),
        (lines(key="an older key"), "tag is not under this vehicle's key"),
        (lines(edit=[("620.5", "621.5")]), "digest does not match"),
        (b"", "it was cut"),
        (b"\x00" * 100_000, "longer than 65536 bytes"),
    ],
)
def test_a_carried_file_that_is_not_this_vehicles_own_is_refused(
    vehicle: Vehicle, dead_url: str, content: bytes, sentence: str
) -> None:
    done = vehicle.boot(dead_url, "--carried", vehicle.write("carried", content))
    assert (done.returncode, done.stdout) == (40, b"")
    assert sentence in said(done)


def test_a_bad_carried_file_does_not_take_the_kept_copy_away(server: Server, vehicle: Vehicle, dead_url: str) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    done = vehicle.boot(dead_url, "--carried", str(vehicle.folder / "missing"))
    assert (done.returncode, done.stdout) == (20, lines())
    assert "carried file" in said(done)


def test_the_newer_of_kept_copy_and_carried_file_is_loaded(server: Server, vehicle: Vehicle, dead_url: str) -> None:
    server.parameters = reply(lines(number=7))
    vehicle.boot(server.url)
    older = vehicle.write("older", lines(number=6))
    newer = vehicle.write("newer", lines(number=8))
    assert vehicle.boot(dead_url, "--carried", older).stdout == lines(number=7)
    assert vehicle.boot(dead_url, "--carried", newer).stdout == lines(number=8)
    assert vehicle.boot(dead_url).stdout == lines(number=8)


def test_at_the_same_number_the_less_good_condition_is_believed(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    questioned = lines(condition="questioned", reasons="track tensioned")
    done = vehicle.boot(dead_url, "--carried", vehicle.write("carried", questioned))
    assert done.stdout == questioned
    done = vehicle.boot(dead_url, "--carried", vehicle.write("carried", lines()))
    assert done.stdout == questioned


def test_a_carried_file_ends_the_standstill_only_with_a_later_number(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines(number=7))
    vehicle.boot(server.url)
    server.parameters = _nothing(5)
    vehicle.boot(server.url)
    for number, code in ((5, 30), (6, 30), (7, 30), (8, 20)):
        done = vehicle.boot(dead_url, "--carried", vehicle.write("carried", lines(number=number)))
        assert done.returncode == code, number
    assert vehicle.boot(dead_url).stdout == lines(number=8)


def test_without_server_and_without_carried_file_there_is_nothing_to_do(vehicle: Vehicle) -> None:
    done = vehicle.boot(None)
    assert done.returncode == 40
    assert "neither a server nor a carried file" in said(done)


def test_a_boot_is_reported_with_number_digest_source_time_and_software(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url, "--software", "drive 4.2")
    (report,) = server.reports()
    assert report["calibration_number"] == 7
    assert f"DIGEST={report['digest']}\n".encode() in lines()
    assert (report["source"], report["age_s"], report["software"]) == ("fetched", 0.0, "drive 4.2")
    assert re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\dZ", report["booted_at"])
    assert server.sent("POST")[0].startswith("POST /api/v1/vehicles/AGV-07/boots HTTP/1.1\r\n")


def test_boots_without_network_are_reported_at_the_next_one_oldest_first(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    vehicle.boot(dead_url)
    vehicle.boot(dead_url, "--carried", vehicle.write("carried", lines(number=8)))
    server.parameters = reply(lines(number=9))
    vehicle.boot(server.url)
    sources = [(r["source"], r["calibration_number"]) for r in server.reports()]
    assert sources == [("fetched", 7), ("kept", 7), ("carried", 8), ("fetched", 9)]
    assert server.reports()[1]["age_s"] >= 0
    assert server.reports()[2]["age_s"] is None
    vehicle.boot(server.url)
    assert len(server.reports()) == 5


def test_a_report_that_is_not_taken_now_waits_and_one_that_is_wrong_is_dropped(
    server: Server, vehicle: Vehicle
) -> None:
    server.parameters = reply(lines())
    for waiting in (reply(b"", "503 Service Unavailable"), b"", problem("not-signed-in", "401 Unauthorized")):
        server.boots = waiting
        done = vehicle.boot(server.url)
        assert done.returncode == 0
        assert "waits" in said(done)
    assert len(_queue(vehicle)) == 3
    server.boots = problem("invalid", "422 Unprocessable Content", detail="booted_at lies ahead")
    done = vehicle.boot(server.url)
    assert done.returncode == 0
    assert "A boot report was refused (status 422: booted_at lies ahead) and dropped." in said(done)
    assert _queue(vehicle) == []


def _never(connection: socket.socket) -> None:
    time.sleep(20)


def test_a_slow_report_does_not_hold_the_boot(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    server.boots = _never
    started = time.monotonic()
    done = vehicle.boot(server.url, "--timeout", "1")
    assert done.returncode == 0
    assert time.monotonic() - started < 4  # One second, and the start of a Python process on a busy machine.
    assert len(_queue(vehicle)) == 1


def _queue(vehicle: Vehicle) -> list[dict]:
    return json.loads(json.loads((vehicle.state / "boots.json").read_text())["content"])["boots"]


def test_the_queue_keeps_the_newest_hundred(server: Server, vehicle: Vehicle, dead_url: str, monkeypatch) -> None:
    from registry import boot_client

    server.parameters = reply(lines())
    vehicle.boot(server.url)
    options = boot_client.Options("AGV-07", str(vehicle.folder / "key"), str(vehicle.state), dead_url)
    notes = []
    for boot in range(103):
        outcome = boot_client.load(boot_client.replace(options, software=f"boot {boot}"))
        notes.append(boot_client.report(boot_client.replace(options, software=f"boot {boot}"), outcome))
    queue = _queue(vehicle)
    assert [queue[0]["software"], queue[-1]["software"], len(queue)] == ["boot 3", "boot 102", 100]
    assert notes[99:101] == ["", "1 old boot reports were dropped."]


def test_no_report_means_none(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url, "--no-report")
    assert server.reports() == []
    assert not (vehicle.state / "boots.json").exists()


def test_a_vehicle_whose_clock_is_wrong_reports_by_the_registrys_clock(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines(), Date="Fri, 01 Jan 2100 00:00:00 GMT")
    vehicle.boot(server.url)
    assert server.reports()[0]["booted_at"] == "2100-01-01T00:00:00Z"


def test_a_clock_that_stands_before_the_last_answer_gives_no_age_and_no_report(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines(), Date="Fri, 01 Jan 2100 00:00:00 GMT")
    vehicle.boot(server.url)
    done = vehicle.boot(dead_url)
    assert (done.returncode, done.stdout) == (20, lines())
    assert "its age cannot be told" in said(done)
    assert "not reported, as the vehicle's clock is wrong" in said(done)


def test_a_damaged_state_file_is_never_loaded_and_a_fresh_answer_replaces_it(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    path = vehicle.state / "state.json"
    whole = path.read_bytes()
    carried = vehicle.write("carried", lines(number=8))
    for damaged in (
        b"",
        whole[:200],
        whole.replace(b"620.5", b"621.5"),
        b"[]",
        b"[" * 9000,
        b"\xff",
        b'{"content": 3, "sha256": 3}',
    ):
        path.write_bytes(damaged)
        done = vehicle.boot(dead_url)
        assert (done.returncode, done.stdout) == (40, b"")
        assert "is damaged" in said(done)
        done = vehicle.boot(dead_url, "--carried", carried)
        assert done.returncode == 40
        assert "unknown what was withdrawn" in said(done)
    done = vehicle.boot(server.url)
    assert done.returncode == 0
    assert vehicle.boot(dead_url).returncode == 20


def test_the_state_of_another_vehicle_is_neither_loaded_nor_reported(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    vehicle.boot(dead_url)
    vehicle.vehicle_id = "AGV-08"
    done = vehicle.boot(dead_url)
    assert done.returncode == 40
    assert "belongs to vehicle AGV-07" in said(done)
    server.parameters = reply(lines("AGV-08"))
    done = vehicle.boot(server.url)
    assert done.returncode == 0
    assert "Earlier boot reports are lost" in said(done)
    assert [r["source"] for r in server.reports()] == ["fetched", "fetched"]


def test_a_kept_copy_under_another_key_is_not_loaded(server: Server, vehicle: Vehicle, dead_url: str) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    done = vehicle.boot(dead_url, key="a-newer-key")
    assert done.returncode == 40
    assert "kept copy may not be used, since its tag is not under this vehicle's key" in said(done)
    server.parameters = reply(lines(key="a-newer-key"))
    assert vehicle.boot(server.url, key="a-newer-key").returncode == 0
    assert "If-None-Match" not in server.sent("GET")[-1]


def test_a_damaged_queue_is_said_and_started_anew(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    (vehicle.state / "boots.json").write_bytes(b"{")
    done = vehicle.boot(server.url)
    assert done.returncode == 0
    assert "Earlier boot reports are lost" in said(done)
    assert len(server.reports()) == 2


def test_a_state_folder_that_cannot_be_written_still_boots_fresh_reports_and_says_so(
    server: Server, vehicle: Vehicle
) -> None:
    vehicle.write("state", "a file where the folder should be")
    server.parameters = reply(lines())
    done = vehicle.boot(server.url)
    assert (done.returncode, done.stdout) == (0, lines())
    assert "could not be kept in" in said(done)
    assert len(server.reports()) == 1


def test_a_read_only_state_folder_keeps_its_copy(server: Server, vehicle: Vehicle, dead_url: str) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    command = [sys.executable, "-I", "-c", _AS_NOBODY, str(CLIENT.parent), str(vehicle.state), KEY]
    server.parameters = reply(lines(number=8))
    vehicle.state.chmod(0o555)
    done = subprocess.run([*command, server.url], capture_output=True, check=True, text=True)
    assert done.stdout.startswith("0 Fresh from the registry: calibration 8")
    assert "could not be kept" in done.stdout
    done = subprocess.run([*command, dead_url], capture_output=True, check=True, text=True)
    assert done.stdout.startswith("20 Loaded from the kept copy: calibration 7")


#: The key is left in a folder of its own: those above the state folder belong to root alone.
_AS_NOBODY = """
import os, sys, tempfile
sys.path.insert(0, sys.argv[1])
import boot_client, encodings.idna
state, key, url = sys.argv[2:]
os.chdir(state)
if os.geteuid() == 0:
    os.setuid(65534)
with tempfile.NamedTemporaryFile("w") as file:
    file.write(key)
    file.flush()
    outcome = boot_client.load(boot_client.Options("AGV-07", file.name, ".", url))
print(outcome.exit_code, outcome.sentence)
"""


def test_a_write_that_dies_half_way_leaves_the_old_copy(vehicle: Vehicle, server: Server, dead_url: str) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    program = (
        "import os, sys; sys.path.insert(0, sys.argv[1]); import boot_client\n"
        "os.replace = lambda *names: os._exit(9)\n"
        "options = boot_client.Options('AGV-07', *sys.argv[2:])\n"
        "boot_client.load(options)\n"
    )
    server.parameters = reply(lines(number=8))
    arguments = [str(CLIENT.parent), str(vehicle.folder / "key"), str(vehicle.state), server.url]
    died = subprocess.run([sys.executable, "-I", "-c", program, *arguments], check=False)
    assert died.returncode == 9
    assert vehicle.boot(dead_url).stdout == lines(number=7)
    assert vehicle.boot(server.url).stdout == lines(number=8)
    assert sorted(path.name for path in vehicle.state.iterdir()) == ["boots.json", "state.json"]


def test_parameters_that_a_full_disk_does_not_take_are_not_loaded(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url, "--no-report")
    command = [sys.executable, "-I", str(CLIENT), "--vehicle", "AGV-07", "--server", server.url]
    command += ["--key-file", str(vehicle.folder / "key"), "--state", str(vehicle.state)]
    with Path("/dev/full").open("wb") as full:
        done = subprocess.run(command, stdout=full, stderr=subprocess.PIPE, check=False)
    assert (done.returncode, done.stderr.count(b"\n")) == (40, 1)
    assert b"standard output cannot be written" in done.stderr
    assert server.reports() == []
