"""Bringing a database to the schema of this code, apart from using it."""

from __future__ import annotations

import secrets
import time
from pathlib import Path

from alembic import command
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import Connection, text
from sqlalchemy.exc import OperationalError

import service
from service.errors import StoreAway, Unsafe
from service.store.database import Database

TRIES_MAX = 20
AGAIN_S = 0.25
CROWDED = {"55P03", "40P01"}  # A lock that did not come in time, and a deadlock.
ADVISORY_LOCK = 0x6B65656C  # So that two deployments cannot migrate at once.


def migrate(url: str) -> None:
    """Bring the database at `url` to the newest schema; harmless when it already is."""
    database = Database(url)
    try:
        for attempt in range(TRIES_MAX):
            try:
                with database.engine.begin() as connection:
                    upgrade(connection)
                    return
            except OperationalError as error:
                # Under traffic a lock may not come in time, or two may wait for one another.
                # Nothing has happened then, and a moment later the same may succeed.
                state = getattr(error.orig, "sqlstate", None)
                if state not in CROWDED or attempt + 1 == TRIES_MAX:
                    raise
            time.sleep(AGAIN_S)
    finally:
        database.close()


def upgrade(connection: Connection, revision: str = "head") -> None:
    """Run the missing migrations inside the caller's transaction, up to a revision."""
    if connection.dialect.name == "postgresql":
        connection.execute(text("SELECT pg_advisory_xact_lock(:lock)"), {"lock": ADVISORY_LOCK})
    config = _config()
    config.attributes["connection"] = connection
    command.upgrade(config, revision)
    # Made once, they stay: a new one would turn every open ticket into a stranger's, and every
    # lesson on features into one on other features.
    for name, value in (
        ("incarnation", secrets.token_hex(8)),
        ("ticket_key", secrets.token_hex(32)),
        ("feature_key", secrets.token_hex(32)),
    ):
        connection.execute(
            text("INSERT INTO fact (name, value) VALUES (:name, :value) ON CONFLICT DO NOTHING"),
            {"name": name, "value": value},
        )


def require_current(database: Database) -> None:
    """
    Refuse a database of another schema than this code's.

    Raises:
        Unsafe: Older or newer.
        StoreAway: It did not answer.
    """
    found = _revision(database)
    head = newest()
    # Newer is refused as well: old code would misread what new code has written.
    if found != head:
        raise Unsafe(
            f"The database is at schema {found}, this code at {head}: run bidkeel migrate."
        )


def newest() -> str:
    """The schema that this code wants."""
    return str(ScriptDirectory.from_config(_config()).get_current_head())


def is_empty(database: Database) -> bool:
    """Whether nothing was ever migrated here."""
    return _revision(database) is None


def _revision(database: Database) -> str | None:
    # Asked at every start, perhaps of a server that is itself still starting.
    try:
        with database.engine.connect() as connection:
            return MigrationContext.configure(connection).get_current_revision()
    except OperationalError as error:
        raise StoreAway("the database did not answer") from error


def _config() -> Config:
    # Beside the package in a checkout, inside it once it is installed from a wheel.
    package = Path(service.__file__).parent
    places = [package / "migrations", package.parent / "migrations"]
    config = Config()
    config.set_main_option(
        "script_location", str(next(p for p in places if (p / "env.py").exists()))
    )
    return config
