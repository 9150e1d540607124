"""Servers on real sockets, and parameter sheets written here from the format's description, not by the program."""

from __future__ import annotations

import hashlib
import hmac
import json
import socket
import ssl
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import pytest

CLIENT = Path(__file__).parents[2] / "registry" / "boot_client.py"
KEY = "key-of-seven"


def lines(vehicle="AGV-07", number=7, condition="good", reasons="", key=KEY, edit=(), **head) -> bytes:
    """A sheet as the registry tags it. ``edit`` replaces text after tagging, as a liar would."""
    fields = {
        "VEHICLE_ID": vehicle,
        "CALIBRATION_NUMBER": number,
        "IN_FORCE_FROM": "2026-03-01T08:00:00Z",
        "LEFT_MM_PER_TICK": "0.3477",
        "RIGHT_MM_PER_TICK": "0.3479",
        "WIDTH_MM": "620.5",
        "U_LEFT_MM_PER_TICK": "1e-05",
        "U_RIGHT_MM_PER_TICK": "1e-05",
        "U_WIDTH_MM": "0.4",
        "COUNTING_BITS": "32",
    } | head
    covered = "".join(f"{name}={value}\n" for name, value in fields.items())
    digest = hashlib.sha256(covered.encode()).hexdigest()
    tag = hmac.new(hashlib.sha256(key.encode()).digest(), (digest + vehicle).encode(), hashlib.sha256).hexdigest()
    text = f"{covered}CONDITION={condition}\nREASONS={reasons}\nDIGEST={digest}\nTAG={tag}\n"
    for old, new in edit:
        assert old in text
        text = text.replace(old, new, 1)
    return text.encode()


def reply(body: bytes, status="200 OK", kind="text/plain; charset=utf-8", **headers) -> bytes:
    given = {"Content-Type": kind, "Content-Length": len(body), "ETag": '"e1"'}
    given |= {name.replace("_", "-"): value for name, value in headers.items()}
    head = "".join(f"{name}: {value}\r\n" for name, value in given.items() if value is not None)
    return f"HTTP/1.1 {status}\r\n{head}\r\n".encode() + body


def problem(kind: str, status: str, **members) -> bytes:
    body = json.dumps({"type": f"/problems/{kind}", "title": kind, **members}).encode()
    return reply(body, status, "application/problem+json", ETag=None)


NOT_MODIFIED = b'HTTP/1.1 304 Not Modified\r\nETag: "e1"\r\n\r\n'
TAKEN = b"HTTP/1.1 201 Created\r\nContent-Length: 2\r\nContent-Type: application/json\r\n\r\n{}"


@dataclass
class Server:
    """Answers each request by ``answer(head, body)``: bytes to send, or a function that is given the socket."""

    parameters: bytes | Callable[[socket.socket], None] = b""
    boots: bytes | Callable[[socket.socket], None] = TAKEN
    requests: list[tuple[str, bytes]] = field(default_factory=list)
    tls: ssl.SSLContext | None = None
    listener: socket.socket = field(default_factory=lambda: socket.create_server(("127.0.0.1", 0)))

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.listener.getsockname()[1]}"

    def sent(self, method: str) -> list[str]:
        return [head for head, _ in self.requests if head.startswith(method)]

    def reports(self) -> list[dict]:
        return [json.loads(body) for head, body in self.requests if head.startswith("POST")]

    def serve(self) -> None:
        while True:
            try:
                connection, _ = self.listener.accept()
            except OSError:
                return
            threading.Thread(target=self._one, args=(connection,), daemon=True).start()

    def _one(self, connection: socket.socket) -> None:
        if self.tls is not None:
            try:
                connection = self.tls.wrap_socket(connection, server_side=True)
            except OSError:
                return  # The client did not trust the certificate.
        with connection, connection.makefile("rb") as stream:
            head = b""
            while not head.endswith(b"\r\n\r\n"):
                piece = stream.readline()
                if not piece:
                    return
                head += piece
            text = head.decode()
            length = next(
                (int(x.split(":")[1]) for x in text.split("\r\n") if x.lower().startswith("content-length")), 0
            )
            self.requests.append((text, stream.read(length)))
            answer = self.boots if text.startswith("POST") else self.parameters
            try:
                if callable(answer):
                    answer(connection)
                else:
                    connection.sendall(answer)
            except (BrokenPipeError, ConnectionResetError):
                return  # The client had enough, which is what some tests are about.


@pytest.fixture
def server() -> Iterator[Server]:
    served = Server()
    thread = threading.Thread(target=served.serve, daemon=True)
    thread.start()
    yield served
    served.listener.shutdown(socket.SHUT_RDWR)
    served.listener.close()
    thread.join(5)


@pytest.fixture
def dead_url() -> str:
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
    return f"http://127.0.0.1:{port}"


@dataclass
class Vehicle:
    """A vehicle with its key, its state folder, and the client as a copied file run by a Python of its own."""

    folder: Path
    vehicle_id: str = "AGV-07"
    python: str = sys.executable

    @property
    def state(self) -> Path:
        return self.folder / "state"

    def write(self, name: str, content: bytes | str) -> str:
        path = self.folder / name
        path.write_bytes(content.encode() if isinstance(content, str) else content)
        return str(path)

    def boot(self, url: str | None, *more: str, key: str = KEY) -> subprocess.CompletedProcess[bytes]:
        command = [self.python, "-I", self.write("boot_client.py", CLIENT.read_bytes())]
        command += [
            "--vehicle",
            self.vehicle_id,
            "--key-file",
            self.write("key", key + "\n"),
            "--state",
            str(self.state),
        ]
        command += ["--server", url] if url else []
        return subprocess.run([*command, *more], capture_output=True, timeout=60, check=False)


@pytest.fixture
def vehicle(tmp_path: Path) -> Vehicle:
    return Vehicle(tmp_path)


def said(done: subprocess.CompletedProcess[bytes]) -> str:
    text = done.stderr.decode()
    assert "Traceback" not in text
    assert "unforeseen" not in text
    return text
