"""Fixtures that every test may ask for: databases that start empty or migrated.

A test that takes `database_url` or `migrated_url` runs once on each database. To stay on one:
`@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)`.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest
from hypothesis import settings as hypothesis_settings

from tests.databases import POSTGRESQL, SQLITE, PostgreSQL, running_postgresql, sqlite_url

# Settings of the shell that started the tests must not reach the service under test.
for _name in [name for name in os.environ if name.startswith("BIDKEEL_")]:
    del os.environ[_name]

# The same examples every time: a test that fails now and then teaches people to run it again.
hypothesis_settings.register_profile("house", derandomize=True, deadline=None, database=None)
hypothesis_settings.load_profile("house")


@pytest.fixture(scope="session")
def anyio_backend() -> str:
    """Asynchronous tests, marked anyio, run on asyncio."""
    return "asyncio"


@pytest.fixture(scope="session")
def postgresql() -> Iterator[PostgreSQL]:
    """The one PostgreSQL server of this run, started when first asked for."""
    with running_postgresql() as server:
        yield server


@pytest.fixture(params=[SQLITE, POSTGRESQL])
def backend(request: pytest.FixtureRequest) -> str:
    """The kind of database a test runs on: each in turn."""
    return str(request.param)


@pytest.fixture
def database_url(backend: str, request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[str]:
    """An empty database of this test's own."""
    if backend == SQLITE:
        yield sqlite_url(tmp_path / "bidkeel.db")
        return
    server: PostgreSQL = request.getfixturevalue("postgresql")
    name = server.create()
    yield server.url(name)
    server.drop(name)


@pytest.fixture
def migrated_url(backend: str, request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[str]:
    """A migrated database of this test's own, copied from one that was migrated once."""
    if backend == SQLITE:
        template: Path = request.getfixturevalue("migrated_sqlite")
        yield sqlite_url(Path(shutil.copy(template, tmp_path / "bidkeel.db")))
        return
    server: PostgreSQL = request.getfixturevalue("postgresql")
    name = server.create(request.getfixturevalue("migrated_postgresql"))
    yield server.url(name)
    server.drop(name)


@pytest.fixture(scope="session")
def migrated_sqlite(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A SQLite file migrated once, to be copied and never opened by a test."""
    from service.store.migrate import migrate

    path = tmp_path_factory.mktemp("migrated") / "template.db"
    migrate(sqlite_url(path))
    return path


@pytest.fixture(scope="session")
def migrated_postgresql(postgresql: PostgreSQL) -> str:
    """A PostgreSQL database migrated once, to be copied and never opened by a test."""
    from service.store.migrate import migrate

    name = postgresql.create()
    migrate(postgresql.url(name))
    return name
