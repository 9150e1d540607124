"""A registry that answers honestly, is dead, slow, or lies."""

from __future__ import annotations

import ast
import socket
import ssl
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest

from tests.vehicle.conftest import CLIENT, KEY, NOT_MODIFIED, Server, Vehicle, lines, problem, reply, said


def test_the_client_is_python_3_8_and_imports_only_the_standard_library() -> None:
    tree = ast.parse(CLIENT.read_text(), feature_version=(3, 8))
    imported = {a.name.split(".")[0] for n in ast.walk(tree) if isinstance(n, ast.Import) for a in n.names}
    imported |= {(n.module or "").split(".")[0] for n in ast.walk(tree) if isinstance(n, ast.ImportFrom)}
    assert imported <= set(sys.stdlib_module_names)


#: This Python, and the oldest one that the client promises to run on where it is installed.
PYTHONS = [sys.executable, *map(str, sorted(Path.home().glob(".pyenv/versions/3.8.*/bin/python3.8")))]


@pytest.mark.parametrize("python", PYTHONS)
def test_a_boot_is_fresh_and_without_network_it_is_from_the_kept_copy(
    server: Server, vehicle: Vehicle, dead_url: str, python: str
) -> None:
    vehicle.python = python
    server.parameters = reply(lines())
    assert (vehicle.boot(server.url).returncode, len(server.reports())) == (0, 1)
    done = vehicle.boot(dead_url)
    assert (done.returncode, done.stdout) == (20, lines())


@pytest.mark.parametrize(("condition", "code"), [("good", 0), ("questioned", 10), ("provisional", 11)])
def test_a_fresh_answer_is_printed_byte_for_byte_with_its_condition_as_exit_code(
    server: Server, vehicle: Vehicle, condition: str, code: int
) -> None:
    body = lines(condition=condition, reasons="tyre pressure set 2026-03-02; é" if code else "")
    server.parameters = reply(body)
    done = vehicle.boot(server.url)
    assert (done.returncode, done.stdout) == (code, body)
    assert said(done).startswith("Fresh from the registry: calibration 7")
    assert ("tyre pressure set" in said(done)) == bool(code)
    assert f"Authorization: Bearer {KEY}\r\n" in server.sent("GET")[0]
    assert "Accept: text/plain\r\n" in server.sent("GET")[0]
    assert server.sent("GET")[0].startswith("GET /api/v1/vehicles/AGV-07/parameters HTTP/1.1\r\n")


def test_the_second_boot_asks_with_the_etag_and_a_304_is_fresh(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines(condition="questioned"))
    assert vehicle.boot(server.url).returncode == 10
    server.parameters = NOT_MODIFIED
    done = vehicle.boot(server.url)
    assert (done.returncode, done.stdout) == (10, lines(condition="questioned"))
    assert "If-None-Match" not in server.sent("GET")[0]
    assert 'If-None-Match: "e1"\r\n' in server.sent("GET")[1]


def test_out_is_written_whole_and_removed_again_when_nothing_may_be_loaded(server: Server, vehicle: Vehicle) -> None:
    out = vehicle.folder / "parameters"
    server.parameters = reply(lines())
    done = vehicle.boot(server.url, "--out", str(out))
    assert (done.returncode, done.stdout, out.read_bytes()) == (0, b"", lines())
    server.parameters = problem("nothing-in-force", "404 Not Found", withdrawn_numbers=[7])
    assert vehicle.boot(server.url, "--out", str(out)).returncode == 30
    assert not out.exists()


def test_an_out_file_that_is_not_parameters_is_never_removed(server: Server, vehicle: Vehicle) -> None:
    precious = vehicle.write("precious", "something else")
    server.parameters = problem("nothing-in-force", "404 Not Found", withdrawn_numbers=[])
    assert vehicle.boot(server.url, "--out", precious).returncode == 30
    assert Path(precious).read_text() == "something else"


def test_parameters_that_cannot_be_handed_over_are_refused_and_not_reported(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    vehicle.write("file", "in the way")
    done = vehicle.boot(server.url, "--out", str(vehicle.folder / "file" / "parameters"))
    assert done.returncode == 40
    assert "cannot be written" in said(done)
    assert server.reports() == []


def test_a_dead_registry_gives_the_kept_copy_with_its_age_and_condition(
    server: Server, vehicle: Vehicle, dead_url: str
) -> None:
    server.parameters = reply(lines(condition="questioned", reasons="drift seen"))
    assert vehicle.boot(server.url).returncode == 10
    done = vehicle.boot(dead_url)
    assert (done.returncode, done.stdout) == (20, lines(condition="questioned", reasons="drift seen"))
    assert "which is questioned: drift seen" in said(done)
    assert " s ago" in said(done)


def test_a_dead_registry_and_nothing_kept_is_refused(vehicle: Vehicle, dead_url: str) -> None:
    done = vehicle.boot(dead_url)
    assert (done.returncode, done.stdout) == (40, b"")
    assert "no copy is kept here" in said(done)


def _trickle(connection: socket.socket) -> None:
    connection.sendall(reply(lines())[:60])
    for _ in range(300):
        time.sleep(0.1)
        connection.sendall(b"x")


def _never(connection: socket.socket) -> None:
    time.sleep(20)


def _endless_headers(connection: socket.socket) -> None:
    connection.sendall(b"HTTP/1.1 200 OK\r\n")
    for number in range(300):
        connection.sendall(f"X-{number}: 1\r\n".encode())
        time.sleep(0.1)


@pytest.mark.parametrize("slow", [_trickle, _never, _endless_headers])
def test_a_slow_registry_holds_the_boot_no_longer_than_the_time_out(server: Server, vehicle: Vehicle, slow) -> None:
    server.parameters = reply(lines())
    assert vehicle.boot(server.url).returncode == 0
    server.parameters = slow
    started = time.monotonic()
    done = vehicle.boot(server.url, "--timeout", "1")
    assert done.returncode == 20
    # One second of waiting; the rest is the start of a Python process on a busy machine.
    assert time.monotonic() - started < 4
    assert "did not answer within 1 s" in said(done)


def test_a_slow_registry_leaves_no_thread_behind_when_imported(server: Server, vehicle: Vehicle) -> None:
    from registry import boot_client

    server.parameters = _trickle
    options = boot_client.Options("AGV-07", vehicle.write("key", KEY), str(vehicle.state), server.url, timeout_s=0.5)
    before = set(threading.enumerate())
    assert boot_client.load(options).exit_code == 40
    for thread in set(threading.enumerate()) - before:
        if "exchange" in thread.name:
            thread.join(2)
            assert not thread.is_alive()


def test_a_registry_that_is_ill_or_cut_off_counts_as_not_reached(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    whole = reply(lines())
    for ill in (
        reply(b"oh", "503 Service Unavailable"),
        reply(b"oh", "500 Internal Server Error"),
        problem("too-many", "429 Too Many Requests"),
        whole[:-30],
        b"",
        b"SSH-2.0-somebody\r\n",
    ):
        server.parameters = ill
        done = vehicle.boot(server.url)
        assert (done.returncode, done.stdout) == (20, lines()), ill
        assert said(done)


LIES = {
    "an edited number": (reply(lines(edit=[("620.5", "650.5")])), "digest does not match"),
    "an edited number with a digest to match": (
        reply(lines(WIDTH_MM="650.5", key="not the key")),
        "tag is not under this vehicle's key",
    ),
    "another vehicle's body": (reply(lines("AGV-08")), "for vehicle AGV-08"),
    "another vehicle's body renamed": (
        reply(lines("AGV-08", edit=[("AGV-08", "AGV-07")])),
        "digest does not match",
    ),
    "a body cut at a line's end": (reply(lines()[: lines().index(b"REASONS")]), "not those of a parameters sheet"),
    "a body cut within a line": (reply(lines()[:100]), "it was cut"),
    "an empty body": (reply(b""), "or it was cut"),
    "a huge body": (reply(lines() + b"x" * 200_000), "longer than 65536 bytes"),
    "a huge body announced and begun": (reply(b"x" * 70_000, Content_Length=10**12), "longer than 65536 bytes"),
    "the wrong content type": (reply(lines(), kind="text/html"), "'text/html' and not text/plain"),
    "compressed": (reply(lines(), Content_Encoding="gzip"), "not text/plain"),
    "not UTF-8": (reply(lines().replace(b"good", b"\xff\xfe")), "not UTF-8"),
    "CRLF": (reply(lines().replace(b"\n", b"\r\n")), "line feed"),
    "a line twice": (reply(lines(edit=[("WIDTH_MM=620.5\n", "WIDTH_MM=620.5\nWIDTH_MM=1\n")])), "comes twice"),
    "an unknown line": (reply(lines(SPEED="3")), "not those of a parameters sheet"),
    "an unknown condition": (reply(lines(condition="splendid")), "condition 'splendid' is none of"),
    "a width that is not a number": (reply(lines(WIDTH_MM="nan")), "WIDTH_MM=nan is not a finite number"),
    "a width beyond numbers": (reply(lines(WIDTH_MM="1e999")), "WIDTH_MM=1e999 is not a finite number"),
    "a width of nothing": (reply(lines(WIDTH_MM="0")), "WIDTH_MM=0 is not above 0"),
    "an uncertainty below 0": (reply(lines(U_WIDTH_MM="-1")), "U_WIDTH_MM=-1 is below 0"),
    "a number that is none": (reply(lines(number="-3")), "CALIBRATION_NUMBER=-3"),
    "a redirection": (
        reply(b"", "302 Found", Location="http://127.0.0.1:1/elsewhere"),
        "redirects to http://127.0.0.1:1",
    ),
    "an unknown vehicle": (problem("not-found", "404 Not Found", detail="no vehicle AGV-07"), "no vehicle AGV-07"),
    "a web page": (reply(b"<h1>lost</h1>", "404 Not Found", "text/html"), "status 404"),
    "a refused key": (problem("not-signed-in", "401 Unauthorized"), "rollbook key issue --vehicle AGV-07"),
    "a key for less": (problem("not-allowed", "403 Forbidden"), "rollbook key issue --vehicle AGV-07"),
    "a problem nested deeply": (
        reply(b'{"a":' * 10_000, "404 Not Found", "application/problem+json"),
        "status 404",
    ),
}


@pytest.mark.parametrize("lie", LIES)
def test_an_answer_that_cannot_be_trusted_is_refused_and_not_covered_up_by_the_kept_copy(
    server: Server, vehicle: Vehicle, dead_url: str, lie: str
) -> None:
    server.parameters = reply(lines())
    assert vehicle.boot(server.url).returncode == 0
    kept = (vehicle.state / "state.json").read_bytes()
    server.parameters, sentence = LIES[lie]
    done = vehicle.boot(server.url)
    assert (done.returncode, done.stdout) == (40, b""), said(done)
    assert sentence in said(done)
    assert said(done).count("\n") == 1
    assert (vehicle.state / "state.json").read_bytes() == kept
    assert len(server.reports()) == 1
    assert vehicle.boot(dead_url).returncode == 20


def test_a_304_without_a_kept_copy_is_refused(server: Server, vehicle: Vehicle) -> None:
    server.parameters = NOT_MODIFIED
    done = vehicle.boot(server.url)
    assert done.returncode == 40
    assert "nothing changed although nothing is kept here" in said(done)


def test_the_limits_file_refuses_what_is_implausible_and_names_it(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    narrow = vehicle.write("limits", '{"width_mm": {"max": 600}, "LEFT_MM_PER_TICK": {"min": 0.3}}')
    done = vehicle.boot(server.url, "--limits", narrow)
    assert (done.returncode, done.stdout) == (40, b"")
    assert "WIDTH_MM=620.5 is not between the limits -inf and 600" in said(done)
    wide = vehicle.write("limits", '{"WIDTH_MM": {"min": 600, "max": 640}, "COUNTING_BITS": {"min": 32}}')
    assert vehicle.boot(server.url, "--limits", wide).returncode == 0


def test_the_limits_hold_for_the_kept_copy_too(server: Server, vehicle: Vehicle, dead_url: str) -> None:
    server.parameters = reply(lines())
    assert vehicle.boot(server.url).returncode == 0
    done = vehicle.boot(dead_url, "--limits", vehicle.write("limits", '{"WIDTH_MM": {"max": 600}}'))
    assert done.returncode == 40
    assert "the kept copy may not be used, since WIDTH_MM=620.5" in said(done)


@pytest.mark.parametrize(
    "limits",
    ["", "[]", "3", '{"WIDTH_MM": 3}', '{"WIDTH_MM": {}}', '{"WIDTH_MM": {"least": 3}}', '{"WIDTH_MM": {"min": NaN}}',
     '{"WIDTH_MM": {"min": 9, "max": 1}}', '{"WIDTH_MM": {"min": "low"}}', "[" * 5000, "\x00\xff"],
)  # fmt: skip
def test_a_limits_file_of_another_form_is_refused_before_anything_is_asked(
    server: Server, vehicle: Vehicle, limits: str
) -> None:
    server.parameters = reply(lines())
    done = vehicle.boot(server.url, "--limits", vehicle.write("limits", limits))
    assert done.returncode == 40
    assert "is not JSON of the form" in said(done)
    assert server.requests == []


def test_a_limit_on_a_field_that_is_not_there_is_refused(server: Server, vehicle: Vehicle) -> None:
    server.parameters = reply(lines())
    done = vehicle.boot(server.url, "--limits", vehicle.write("limits", '{"WHEELBASE_MM": {"min": 1}}'))
    assert done.returncode == 40
    assert "the limits name WHEELBASE_MM" in said(done)


@pytest.mark.parametrize(
    ("more", "sentence"),
    [
        (("--server", "ftp://somewhere"), "not of the form https://host:port"),
        (("--server", "http://127.0.0.1:99999"), "cannot be read"),
        (("--server", "127.0.0.1:8460"), "not of the form"),
        (("--timeout", "0"), "time-out of 0 s"),
        (("--timeout", "nan"), "time-out of nan s"),
        (("--timeout", "soon"), "wrong usage"),
        (("--vehicle", "../x"), "the vehicle id '../x'"),
        (("--key-file", "/nowhere/key"), "key file /nowhere/key cannot be read (No such file or directory)"),
        (("--time", "3"), "wrong usage"),
        (("--ca-file", "/nowhere/certificates", "--server", "https://127.0.0.1:1"), "certificates"),
    ],
)
def test_wrong_usage_ends_as_a_refusal_so_that_a_start_script_stands_still(
    server: Server, vehicle: Vehicle, more: tuple[str, ...], sentence: str
) -> None:
    done = vehicle.boot(server.url, *more)
    assert done.returncode == 40
    assert sentence in said(done)


def test_an_empty_key_file_is_refused(server: Server, vehicle: Vehicle) -> None:
    done = vehicle.boot(server.url, key=" ")
    assert done.returncode == 40
    assert "does not hold one key" in said(done)


def test_the_key_is_never_shown(server: Server, vehicle: Vehicle) -> None:
    for answer in (reply(lines()), reply(lines(key="other")), problem("not-signed-in", "401 Unauthorized"), b""):
        server.parameters = answer
        done = vehicle.boot(server.url)
        assert KEY.encode() not in done.stdout + done.stderr


def test_a_name_that_resolves_to_nothing_counts_as_not_reached(vehicle: Vehicle, server: Server) -> None:
    server.parameters = reply(lines())
    vehicle.boot(server.url)
    assert vehicle.boot("http://no-such-host.invalid:8460", "--timeout", "5").returncode == 20


def test_https_needs_a_certificate_that_is_trusted_and_without_one_the_registry_counts_as_not_reached(
    vehicle: Vehicle, server: Server
) -> None:
    certificate = str(Path(__file__).with_name("loopback.pem"))  # For 127.0.0.1, made for this test, worth nothing.
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.load_cert_chain(certificate)
    server.tls = context
    server.parameters = reply(lines())
    url = server.url.replace("http:", "https:")
    assert vehicle.boot(url, "--ca-file", certificate).returncode == 0
    done = vehicle.boot(url)
    assert done.returncode == 20
    assert "was not reached" in said(done)


def test_the_client_says_what_it_is_for(vehicle: Vehicle) -> None:
    done = subprocess.run([sys.executable, str(CLIENT), "--help"], capture_output=True, check=True)
    assert b"20 kept copy, 30 nothing in force, 40 refused" in b" ".join(done.stdout.split())
