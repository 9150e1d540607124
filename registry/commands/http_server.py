"""The HTTP server behind ``rollbook serve``: granian, which reads HTTP in Rust and calls the application in threads.

Chosen by measurement, see DEVELOPERS.md. The application runs in worker processes of its own, so that a pass of the
schedule, which computes in this one, never makes a request wait for the interpreter.
"""

from __future__ import annotations

import http.client
import multiprocessing
import os
import signal
import socket
import threading
from collections.abc import Callable
from contextlib import closing
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

from granian.constants import HTTPModes, Interfaces
from granian.log import LogLevels
from granian.server import Server

from registry.errors import Conflict

if TYPE_CHECKING:
    from flask import Flask

#: A request that has not ended so long after SIGTERM is cut off.
_STOP_S = 15
_READY_EVERY_S = 0.1


@dataclass(frozen=True)
class Address:
    """Where to listen."""

    host: str
    port: int

    def url(self) -> str:
        """The address as a browser takes it."""
        host = f"[{self.host}]" if ":" in self.host else self.host
        return f"http://{host}:{self.port}"


def free_address(host: str, port: int) -> Address:
    """
    Make sure that nobody listens at an address yet.

    Parameters
    ----------
    host, port
        Port 0 is any free one.

    Raises
    ------
    Conflict
        The port is taken, or the host is none of this machine's.
    """
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    with closing(socket.socket(family, socket.SOCK_STREAM)) as probe:
        # The server shares its port among its workers, and would share it with a second server without a word.
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind((host, port))
        except (OSError, OverflowError) as error:
            reason = getattr(error, "strerror", None) or str(error)
            raise Conflict(
                f"cannot listen at {host} port {port} ({reason}): choose another with --host, --port"
            ) from error
        return Address(host, int(probe.getsockname()[1]))


def run(home: Path, address: Address, workers: int, threads: int, when_ready: Callable[[], None]) -> int:
    """
    Serve until SIGTERM or SIGINT.

    Parameters
    ----------
    home
        Of the installation; each worker makes its own services from it.
    workers, threads
        Processes, and threads in each.
    when_ready
        Called once, in a thread of its own, when the first request has been answered.

    Returns
    -------
    int
        0 after a signal, else 1: workers ended by themselves, again and again.

    Raises
    ------
    Exception
        What ``when_ready`` raised, after the server is down.
    """
    # Forked children would share this process's open database.
    multiprocessing.set_start_method("spawn", force=True)
    server = Server(
        "registry.app:create_app",
        address=address.host,
        port=address.port,
        interface=Interfaces.WSGI,
        http=HTTPModes.http1,
        websockets=False,
        workers=workers,
        blocking_threads=threads,
        log_level=LogLevels.error,
        workers_kill_timeout=_STOP_S,
        respawn_failed_workers=True,
    )
    stopped = threading.Event()
    failed: list[Exception] = []

    def announce() -> None:
        try:
            if _answers(address, stopped):
                when_ready()
        except Exception as error:  # noqa: BLE001 - raised again in the main thread, once the server is down
            failed.append(error)
            os.kill(os.getpid(), signal.SIGTERM)

    announcer = threading.Thread(target=announce, daemon=True)
    server.on_startup(announcer.start)
    try:
        server.serve(target_loader=partial(load_app, home), wrap_loader=False)
    except SystemExit as ended:
        return int(ended.code or 0)
    finally:
        stopped.set()
        if announcer.is_alive():
            announcer.join()
    if failed:
        raise failed[0]
    return 0


def load_app(home: Path) -> Flask:
    """The application of one worker process, on a home that is ready."""
    from registry.app import create_app
    from registry.commands.logs import configure
    from registry.services import make_services
    from registry.settings import Settings

    configure()
    return create_app(make_services(Settings.from_environment(home, create=False)))


def _answers(address: Address, stopped: threading.Event) -> bool:
    """Ask for the program's own health until it answers (sockets listen before the application is there) or stops."""
    host = {"0.0.0.0": "127.0.0.1", "::": "::1"}.get(address.host, address.host)
    answered = False
    while not answered and not stopped.wait(_READY_EVERY_S):
        connection = http.client.HTTPConnection(host, address.port, timeout=5.0)
        try:
            connection.request("GET", "/healthz")
            answered = connection.getresponse().status == http.HTTPStatus.OK
        except (OSError, http.client.HTTPException):
            answered = False
        finally:
            connection.close()
    return answered
