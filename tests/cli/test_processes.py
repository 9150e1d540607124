"""Commands as real processes: serving, the schedule, signals, ports, pipes."""

from __future__ import annotations

import json
import os
import pty
import signal
import socket
import subprocess
import sys
import threading
import time
import urllib.error
import urllib.request
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from tests.cli.conftest import TUG, Commands


def command(*arguments: object) -> list[str]:
    return [sys.executable, "-m", "registry", *map(str, arguments)]


@contextmanager
def running(*arguments: object) -> Iterator[subprocess.Popen[str]]:
    """A process that is asked to stop at the end, and then must end well and quietly."""
    with subprocess.Popen(command(*arguments), stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        try:
            yield process
        finally:
            if process.poll() is None:
                process.send_signal(signal.SIGTERM)


def first_document(process: subprocess.Popen[str]) -> Any:
    assert process.stdout is not None
    text = ""
    while not text.endswith("}\n"):
        line = process.stdout.readline()
        assert line, process.stderr and process.stderr.read()
        text += line
    return json.loads(text)


def status_of(url: str) -> int:
    try:
        with urllib.request.urlopen(url, timeout=30) as answer:
            return int(answer.status)
    except urllib.error.HTTPError as error:
        return error.code


def test_serve_prints_its_address_when_it_answers_looks_at_the_fleet_and_ends_on_sigterm(rollbook: Commands, tug: str):
    with running("serve", "--home", rollbook.home, "--port", 0, "--json") as serving:
        address = first_document(serving)["address"]
        assert address.startswith("http://127.0.0.1:")
        assert status_of(f"{address}/readyz") == 200
        assert status_of(f"{address}/api/v1/vehicles") == 401
        said = ""
        while "a pass was made" not in said:
            line = serving.stderr.readline()  # type: ignore[union-attr]  # it is a pipe
            assert line, said
            said += line
        port = address.rsplit(":", 1)[1]
        second = subprocess.run(
            command("serve", "--home", rollbook.home, "--port", port), capture_output=True, text=True, check=False
        )
        assert second.returncode == 1
        assert f"cannot listen at 127.0.0.1 port {port} (Address already in use)" in second.stderr
        assert rollbook.json("check") == {"findings": []}
        serving.send_signal(signal.SIGTERM)
        _, rest = serving.communicate(timeout=60)
    assert serving.returncode == 0, said + rest
    assert "Traceback" not in said + rest
    with pytest.raises(urllib.error.URLError):
        urllib.request.urlopen(address, timeout=5)


def test_two_workers_run_and_one_makes_the_pass(rollbook: Commands, tug: str):
    with running("worker", "--home", rollbook.home) as one, running("worker", "--home", rollbook.home) as other:
        said: list[list[str]] = [[], []]
        readers = [
            threading.Thread(target=lambda worker=worker, lines=lines: lines.extend(worker.stderr))
            for worker, lines in zip((one, other), said, strict=True)
        ]
        for reader in readers:
            reader.start()

        def heard(words: str) -> int:
            return sum(words in line for lines in said for line in list(lines))

        until = time.monotonic() + 120.0
        while (heard("The schedule runs") < 2 or heard("a pass was made") < 1) and time.monotonic() < until:
            time.sleep(0.1)
        time.sleep(2.0)  # Both look at once when they start: a second pass would come now.
        for worker in (one, other):
            worker.send_signal(signal.SIGTERM)
            worker.wait(timeout=60)
        for reader in readers:
            reader.join(timeout=60)
    assert (one.returncode, other.returncode) == (0, 0), said
    assert heard("The schedule runs") == 2, said
    assert heard("a pass was made") == 1, said


def test_serving_without_schedule_makes_no_pass_and_ends_on_sigint(rollbook: Commands, tug: str):
    with running("serve", "--home", rollbook.home, "--port", 0, "--no-schedule", "--json") as serving:
        address = first_document(serving)["address"]
        assert status_of(f"{address}/healthz") == 200
        serving.send_signal(signal.SIGINT)
        _, said = serving.communicate(timeout=60)
    assert serving.returncode == 0
    assert "a pass was made" not in said


def children_of(process: subprocess.Popen[str]) -> list[int]:
    """The server's own processes; Python's watcher over shared resources is none of them."""
    found = map(int, Path(f"/proc/{process.pid}/task/{process.pid}/children").read_text().split())
    return [pid for pid in found if b"spawn_main" in Path(f"/proc/{pid}/cmdline").read_bytes()]


def listeners(address: str) -> int:
    """How many sockets listen at the address: one for every server process that is up."""
    port = f"{int(address.rsplit(':', 1)[1]):04X}"
    rows = [line.split() for line in Path("/proc/net/tcp").read_text(encoding="ascii").splitlines()[1:]]
    return sum(row[1].endswith(f":{port}") and row[3] == "0A" for row in rows)


def test_a_server_process_that_dies_is_replaced_while_the_other_answers(rollbook: Commands, tug: str):
    with running("serve", "--home", rollbook.home, "--port", 0, "--no-schedule", "--json") as serving:
        address = first_document(serving)["address"]
        before = children_of(serving)
        deadline = time.monotonic() + 60
        while listeners(address) < len(before):  # The first answer comes when the first of them is up.
            assert time.monotonic() < deadline
            time.sleep(0.1)
        os.kill(before[0], signal.SIGKILL)
        cut_off = 0
        while len(set(children_of(serving)) - {before[0]}) < len(before):
            assert time.monotonic() < deadline
            try:
                assert status_of(f"{address}/healthz") == 200
            except (ConnectionError, urllib.error.URLError):
                # It was already with the process that died: nobody can answer it.
                cut_off += 1
            time.sleep(0.1)
        assert cut_off <= 2
        assert [status_of(f"{address}/healthz") for _ in range(10)] == [200] * 10
        serving.send_signal(signal.SIGTERM)
        serving.communicate(timeout=60)
    assert serving.returncode == 0


def test_a_server_whose_schedule_cannot_start_goes_down_and_says_why(rollbook: Commands, tug: str):
    program = (
        "import sys; from pathlib import Path; from registry.commands import http_server\n"
        "def fail(): raise RuntimeError('no schedule today')\n"
        "http_server.run(Path(sys.argv[1]), http_server.free_address('127.0.0.1', 0), 1, 1, fail)\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", program, rollbook.home], capture_output=True, text=True, check=False, timeout=120
    )
    assert done.returncode == 1
    assert "no schedule today" in done.stderr


@pytest.mark.parametrize("arguments", [("--host", "192.0.2.1"), ("--host", "nowhere.invalid")])
def test_an_address_that_is_not_this_machines_is_refused(rollbook: Commands, tug: str, arguments: tuple[str, str]):
    assert "choose another with --host, --port" in rollbook.refused("serve", *arguments)


def test_a_taken_port_is_refused_before_a_demo_is_built(rollbook: Commands):
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port = taken.getsockname()[1]
        assert f"port {port}" in rollbook.refused("demo", "--port", port)
    assert not rollbook.home.exists()


def test_a_demo_is_never_built_over_anything(rollbook: Commands):
    rollbook.write("home/precious", "content")
    assert "is not an empty folder" in rollbook.refused("demo", "--build-only")
    assert [path.name for path in rollbook.home.iterdir()] == ["precious"]
    assert rollbook("demo", "--days", 3, "--build-only").exit_code == 2


@pytest.mark.slow
def test_a_short_demo_is_built_whole_and_can_be_signed_in_to(rollbook: Commands):
    done = subprocess.run(
        command("demo", "--build-only", "--json", "--days", 42, "--home", rollbook.home),
        capture_output=True,
        text=True,
        check=True,
    )
    built = json.loads(done.stdout)
    assert set(built) == {"home", "sign_in", "vehicles", "runs", "alerts"}
    assert (built["home"], set(built["sign_in"])) == (str(rollbook.home), {"name", "password"})
    assert 12 <= built["vehicles"] <= 20
    assert len(rollbook.json("alerts", "--open")["items"]) == built["alerts"]
    assert rollbook.json("check") == {"findings": []}
    assert "\x1b" not in done.stderr  # No bar and no colour where there is no terminal.


def test_parameters_pass_through_a_pipe_byte_for_byte(rollbook: Commands, tug: str, driven: Path):
    rollbook("runs", "load", driven)
    rollbook("adopt", rollbook.json("baseline", tug)["calibration_id"], "--reason", "x")
    rollbook("key", "issue", "--vehicle", tug)
    done = subprocess.run(command("parameters", tug, "--home", rollbook.home), capture_output=True, check=True)
    assert done.stdout == rollbook("parameters", tug).stdout_bytes
    assert done.stderr == b""


def test_a_reader_that_has_had_enough_ends_a_list_without_a_trace(rollbook: Commands, tug: str):
    listing = " ".join(command("history", tug, "--home", rollbook.home, "--json"))
    done = subprocess.run(["bash", "-c", f"{listing} | head -c 1"], capture_output=True, text=True, check=False)
    assert (done.stdout, done.stderr) == ("{", "")


def test_the_version_is_told() -> None:
    done = subprocess.run(command("--version"), capture_output=True, text=True, check=True)
    assert done.stdout.strip()[0].isdigit()


def test_a_terminal_sees_a_bar(rollbook: Commands, tug: str, driven: Path):
    ours, theirs = pty.openpty()
    with subprocess.Popen(command("runs", "load", driven, "--home", rollbook.home), stderr=theirs) as loading:
        os.close(theirs)
        seen = b""
        try:
            while piece := os.read(ours, 4096):
                seen += piece
        except OSError:
            pass  # What Linux answers once the other end is closed.
    os.close(ours)
    assert loading.returncode == 0
    assert b"Loading runs" in seen
    assert b"100%" in seen


def test_a_vehicle_is_added_by_the_installed_program(rollbook: Commands):
    program = Path(sys.executable).with_name("rollbook")
    if not program.exists():
        pytest.fail("the program is not installed beside the interpreter: pip install -e .")
    file = rollbook.write("tug-9.json", TUG)
    done = subprocess.run(
        [program, "vehicle", "add", file, "--home", rollbook.home], capture_output=True, text=True, check=True
    )
    assert done.stderr == "tug-9 is registered.\n"
