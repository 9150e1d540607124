"""An application over the yard, and people who are signed in to it through the page."""

from __future__ import annotations

import re
import shutil
import sqlite3
from collections.abc import Callable
from contextlib import closing
from dataclasses import dataclass, replace
from itertools import count
from pathlib import Path
from typing import Any

import pytest
from flask import Flask
from flask.testing import FlaskClient
from werkzeug.test import TestResponse

from registry.app import create_app
from registry.services import Services
from tests.conftest import CountingIds, StandingClock, services_in
from tests.web.yard import PASSWORD, Yard, furnish


@dataclass(frozen=True)
class Furnished:
    """The yard's database, lived through once and copied for each test."""

    file: Path
    yard: Yard


@pytest.fixture(scope="session")
def furnished(migrated_file: Path, tmp_path_factory: pytest.TempPathFactory) -> Furnished:
    folder = tmp_path_factory.mktemp("yard")
    shutil.copy(migrated_file, folder / "rollbook.db")
    clock = StandingClock()
    yard = furnish(services_in(folder, clock), clock)
    return Furnished(folder / "rollbook.db", yard)


@pytest.fixture
def services(tmp_path: Path, furnished: Furnished, clock: StandingClock) -> Services:
    """Services on a yard of one's own; identities go on counting where the yard's end."""
    with closing(sqlite3.connect(furnished.file)) as made, closing(sqlite3.connect(tmp_path / "rollbook.db")) as copy:
        made.backup(copy)
    return replace(services_in(tmp_path, clock), new_id=CountingIds(count(1000)))


@pytest.fixture
def yard(furnished: Furnished) -> Yard:
    return furnished.yard


@pytest.fixture
def app(services: Services) -> Flask:
    return create_app(services)


@dataclass
class Visitor:
    """A browser without scripts: reads pages, fills in their forms."""

    client: FlaskClient

    def get(self, path: str) -> TestResponse:
        return self.client.get(path)

    def text(self, path: str) -> str:
        response = self.client.get(path)
        assert response.status_code == 200, (path, response.status_code)
        return response.get_data(as_text=True)

    def token(self, page: str) -> str:
        found = re.search(r'name="csrf_token" value="([^"]+)"', self.text(page))
        assert found, f"no form on {page}"
        return found.group(1)

    def post(self, path: str, page: str, **fields: Any) -> TestResponse:
        """Send a form of ``page`` to ``path``."""
        return self.client.post(path, data={"csrf_token": self.token(page), **fields})

    def sign_in(self, name: str, password: str = PASSWORD, query: str = "") -> TestResponse:
        return self.post(f"/sign-in{query}", "/sign-in", name=name, password=password)


@pytest.fixture
def stranger(app: Flask) -> Visitor:
    return Visitor(app.test_client())


@pytest.fixture
def visitor(app: Flask, yard: Yard) -> Callable[[str], Visitor]:
    """Makes a visitor who is signed in under a name of the yard."""

    def make(name: str) -> Visitor:
        one = Visitor(app.test_client())
        assert one.sign_in(name).status_code == 303
        return one

    return make
