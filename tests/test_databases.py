"""The databases that tests stand on: real, durable, separate and empty at the start."""

import sqlite3
from pathlib import Path

import psycopg
import pytest
from sqlalchemy import create_engine, inspect, text

from tests.databases import PostgreSQL


def test_the_server_syncs_as_a_production_server_would(postgresql: PostgreSQL) -> None:
    """Tests on a server that does not sync would prove nothing about durability."""
    names = ("fsync", "synchronous_commit", "full_page_writes", "data_checksums")
    assert [postgresql.setting(name) for name in names] == ["on"] * 4


def test_a_new_database_is_empty(database_url: str) -> None:
    """Each test begins with nothing in its database."""
    engine = create_engine(database_url)
    assert inspect(engine).get_table_names() == []
    engine.dispose()


def test_two_databases_know_nothing_of_each_other(postgresql: PostgreSQL) -> None:
    """What one test writes no other test can read."""
    names = postgresql.create(), postgresql.create()
    engines = [create_engine(postgresql.url(name)) for name in names]
    with engines[0].begin() as connection:
        connection.execute(text("CREATE TABLE mark (id int)"))
    assert [inspect(engine).get_table_names() for engine in engines] == [["mark"], []]
    for engine, name in zip(engines, names, strict=True):
        engine.dispose()
        postgresql.drop(name)


def test_a_copy_carries_what_its_template_holds(postgresql: PostgreSQL) -> None:
    """A database made from a template has its tables and rows."""
    template = postgresql.create()
    engine = create_engine(postgresql.url(template))
    with engine.begin() as connection:
        connection.execute(text("CREATE TABLE mark AS SELECT 7 AS id"))
    engine.dispose()
    name = postgresql.create(template)
    copy = create_engine(postgresql.url(name))
    with copy.connect() as connection:
        assert connection.execute(text("SELECT id FROM mark")).scalar_one() == 7
    copy.dispose()
    postgresql.drop(name)
    postgresql.drop(template)


def test_a_dropped_database_ends_its_connections(postgresql: PostgreSQL) -> None:
    """A connection left open by a test does not keep its database alive."""
    name = postgresql.create()
    engine = create_engine(postgresql.url(name))
    connection = engine.connect()
    postgresql.drop(name)
    with pytest.raises(Exception, match="terminat") as ended:
        connection.execute(text("SELECT 1"))
    assert isinstance(ended.value.__cause__, psycopg.OperationalError)
    connection.invalidate()
    connection.close()
    engine.dispose()


def test_a_migrated_database_has_tables_and_is_its_own(migrated_url: str) -> None:
    """The migrated fixture gives a schema, and a fresh copy of it each time."""
    engine = create_engine(migrated_url)
    assert "alembic_version" in inspect(engine).get_table_names()
    with engine.begin() as connection:
        connection.execute(text("CREATE TABLE mark (id int)"))
    engine.dispose()


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_a_migrated_sqlite_copy_is_whole(migrated_url: str, migrated_sqlite: Path) -> None:
    """A copied file is complete: nothing was left behind in a write-ahead log."""
    assert not migrated_sqlite.with_name(f"{migrated_sqlite.name}-wal").exists()
    with sqlite3.connect(migrated_url.removeprefix("sqlite:///")) as connection:
        assert connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    connection.close()
