"""A PostgreSQL of our own starts, is harmed in every way that we know, and comes back."""

from __future__ import annotations

import asyncio
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import pytest
from sqlalchemy import text

from service.commands import drill_nemesis
from service.commands.postgresql_process import NoPostgreSQL, PostgreSQLProcess, programs
from service.errors import StoreAway
from service.store.database import Database

ONE = text("SELECT 1")


@pytest.fixture(scope="module")
def server() -> Iterator[PostgreSQLProcess]:
    """One server for this file."""
    with PostgreSQLProcess() as server:
        yield server


def answers(server: PostgreSQLProcess) -> bool:
    """Whether it takes a new connection and answers."""
    with closing(Database(server.url)) as database:
        try:
            return bool(database.read(lambda c: c.execute(ONE).scalar_one()) == 1)
        except StoreAway:
            return False


@pytest.mark.parametrize("mode", ["fast", "immediate"])
def test_it_stops_and_starts_again(server: PostgreSQLProcess, mode: str) -> None:
    """Whatever the way, nobody answers meanwhile."""
    assert answers(server)
    server.stop(mode)
    assert not answers(server)
    server.start()
    assert answers(server)


def test_it_comes_back_after_kill_9(server: PostgreSQLProcess) -> None:
    """Its orphans may hold it up for a moment."""
    server.kill_postmaster()
    asyncio.run(drill_nemesis._start_again(server))
    assert answers(server)


def test_connections_are_cut_and_come_back(server: PostgreSQLProcess) -> None:
    """A transaction in the middle learns that it is away; the next one is served."""
    with closing(Database(server.url)) as database:

        def cut(connection: object) -> None:
            assert server.cut_connections() == 1
            connection.execute(ONE)  # type: ignore[attr-defined]

        with pytest.raises(StoreAway):
            database.write(cut)
    assert answers(server)


def test_a_program_that_fails_says_why(server: PostgreSQLProcess) -> None:
    """Starting what runs already is refused by pg_ctl in its own words."""
    with pytest.raises(NoPostgreSQL, match="another server might be running"):
        server._run("pg_ctl", "-w", "-t", "1", "-o", "-c port=1", "start")


def test_its_programs_are_found() -> None:
    """On the path, or in the package that carries them."""
    assert {"initdb", "pg_ctl"} <= {path.name for path in Path(programs()).iterdir()}


def test_nothing_is_left_behind() -> None:
    """Neither a process nor a folder."""
    with PostgreSQLProcess() as server:
        folder = Path(server.url.partition("host=")[2])
        assert folder.exists()
    assert not folder.exists()
    assert not answers(server)
