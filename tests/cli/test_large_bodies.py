"""Bodies beyond the limit, over a real socket: the sender hears why, whatever it sends before it listens."""

from __future__ import annotations

import gzip
import http.client
import json
import os
import urllib.error
import urllib.request
from collections.abc import Iterator
from typing import Any
from urllib.parse import urlsplit

import pytest

from tests.cli.conftest import Commands
from tests.cli.test_processes import first_document, running

MB = 1_000_000


@pytest.fixture
def door(rollbook: Commands, tug: str) -> Iterator[tuple[str, dict[str, str]]]:
    """The address where runs are handed in, and the headers of one who may."""
    key = rollbook.person("Tove", "technician")
    with running("serve", "--home", rollbook.home, "--port", 0, "--no-schedule", "--json") as serving:
        address = first_document(serving)["address"]
        headers = {"Authorization": f"Bearer {key}", "Content-Type": "application/json"}
        yield f"{address}/api/v1/vehicles/{tug}/runs", headers
        serving.terminate()
        _, said = serving.communicate(timeout=60)
    assert serving.returncode == 0
    assert "Traceback" not in said


def sent(url: str, body: Any, headers: dict[str, str]) -> tuple[int, dict[str, Any]]:
    parts = urlsplit(url)
    connection = http.client.HTTPConnection(parts.hostname or "", parts.port, timeout=60)
    try:
        connection.request("POST", parts.path, body=body, headers=headers)
        answer = connection.getresponse()
        assert answer.headers["Content-Type"] == "application/problem+json"
        return answer.status, json.loads(answer.read())
    finally:
        connection.close()


def test_a_body_beyond_the_limit_is_answered_and_not_broken_off(door):
    url, headers = door
    plain = b'{"note": "' + b"a" * (17 * MB) + b'"}'
    # Bytes at random, so that the packed body is as long as the plain one.
    packed = gzip.compress(os.urandom(17 * MB), compresslevel=1)
    for body, encoding in ((plain, {}), (packed, {"Content-Encoding": "gzip"}), (b"a" * (60 * MB), {})):
        status, told = sent(url, body, headers | encoding)
        assert status == told["status"] == 413
        assert "16 MB" in told["detail"]


def test_a_body_beyond_the_limit_that_does_not_say_its_length_is_answered_too(door):
    url, headers = door
    status, told = sent(url, (b"a" * MB for _ in range(17)), headers)
    assert status == told["status"] == 413
    assert "16 MB" in told["detail"]


def test_a_gzipped_body_that_unpacks_beyond_the_limit_is_answered(door):
    url, headers = door
    bomb = gzip.compress(bytes(257 * MB), compresslevel=1)
    status, told = sent(url, bomb, headers | {"Content-Encoding": "gzip"})
    assert status == 413
    assert "256 MB" in told["detail"]


def test_the_librarys_own_opener_hears_it_too_and_the_server_goes_on(door):
    url, headers = door
    with pytest.raises(urllib.error.HTTPError) as refused:
        urllib.request.urlopen(urllib.request.Request(url, b"a" * (17 * MB), headers), timeout=60)
    with refused.value as answer:
        assert (answer.code, json.load(answer)["type"]) == (413, "/problems/request-entity-too-large")
    status, told = sent(url, b"{}", headers)
    assert (status, told["type"]) == (422, "/problems/invalid")
