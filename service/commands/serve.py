"""bidkeel serve: one worker process over HTTP."""

from __future__ import annotations

import argparse
import fcntl
import logging
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import uvicorn

from service.app import create_app
from service.commands.logs import log_config
from service.connecting import open_database
from service.errors import Unsafe
from service.settings import Settings, load
from service.store import keys
from service.store.database import Database
from service.store.migrate import is_empty, migrate

logger = logging.getLogger(__name__)

STOP_S = 8


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The port may be given here; everything else is a setting."""
    parser.add_argument("--host", help="address to listen on, instead of BIDKEEL_HOST")
    parser.add_argument("--port", type=int, help="TCP port, instead of BIDKEEL_PORT")


def run(arguments: argparse.Namespace) -> int:
    """Serve until a signal; slices are given back before this returns."""
    # Settings are read here and handed on; nothing below reads the environment.
    settings = load()
    if settings.workers > 1:
        raise Unsafe(
            "One serve is one worker: on PostgreSQL start as many as you want, each alone."
        )
    with sole_server(settings):
        prepare(settings)
        uvicorn.run(
            create_app(settings),
            host=arguments.host or settings.host,
            port=arguments.port or settings.port,
            log_config=log_config(settings.log_format),
            access_log=False,
            loop="uvloop",
            http="httptools",
            timeout_graceful_shutdown=STOP_S,
        )
    return 0


def prepare(settings: Settings) -> None:
    """On an empty database: migrate, make an admin key and show it, this once."""
    database = open_database(settings)
    try:
        if is_empty(database):
            migrate(settings.database_url.get_secret_value())
            _show_first_key(database)
    finally:
        database.close()


@contextmanager
def sole_server(settings: Settings) -> Iterator[None]:
    """
    Hold the lock that keeps a second process from serving one SQLite file.

    Raises:
        Unsafe: Another process holds it.
    """
    path = sqlite_path(settings)
    if path is None:
        yield
        return
    with path.with_name(path.name + ".serving").open("w") as lock:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            text = "Another process serves this SQLite file; use PostgreSQL for more than one."
            raise Unsafe(text) from error
        yield


def sqlite_path(settings: Settings) -> Path | None:
    """The file of a SQLite database, else None."""
    url = settings.database_url.get_secret_value()
    return Path(url.removeprefix("sqlite:///")) if url.startswith("sqlite:///") else None


def _show_first_key(database: Database) -> None:
    key, bearer = keys.add(database, "first", ["admin"])
    sys.stdout.write(
        f"This database was empty. Its admin key ({key.id}) is shown this once:\n\n  {bearer}\n\n"
    )
    sys.stdout.flush()
