"""bidkeel serve: a crew of workers and a clerk, on SQLite with one worker."""

from __future__ import annotations

import argparse
import fcntl
import logging
import logging.config
import os
import socket
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import IO

from service.app import sources_of
from service.commands.crew import LOOK_S, Berth, Crew, listen_on
from service.commands.logs import log_config
from service.connecting import open_database
from service.errors import Unsafe
from service.settings import PREFIX, Settings, load
from service.store import keys
from service.store.database import Database
from service.store.migrate import is_empty, migrate, require_current

logger = logging.getLogger(__name__)

LEAVE_S = 3.0
GIVEN = ("host", "port", "workers")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What differs from start to start may be given here; everything else is a setting."""
    parser.add_argument("--host", help="address to listen on, instead of BIDKEEL_HOST")
    parser.add_argument("--port", help="TCP port, instead of BIDKEEL_PORT")
    parser.add_argument("--workers", help="serving processes, instead of BIDKEEL_WORKERS")


def run(arguments: argparse.Namespace) -> int:
    """Serve until a signal; slices are given back before this returns."""
    given = {f"{PREFIX}{name.upper()}": getattr(arguments, name) for name in GIVEN}
    # Settings are read here and handed on; nothing below reads the environment.
    settings = load(os.environ | {name: text for name, text in given.items() if text is not None})
    # Before the database is touched, so that two first starts cannot both prepare it.
    with sole_server(settings) as lock:
        prepare(settings)
        _say_where(settings)
        _command(settings, [] if lock is None else [lock])
    return 0


def _command(settings: Settings, kept: list[int]) -> None:
    logging.config.dictConfig(log_config(settings.log_format))
    # Here and not in the workers, so that a taken port is told to whoever started us.
    shared = _listening(settings)
    berths = [Berth("worker", place) for place in range(settings.workers)]
    Crew(shared, [*berths, Berth("clerk", settings.workers)], kept).run()


def _listening(settings: Settings) -> list[socket.socket]:
    places = [(settings.host, settings.port)]
    if settings.metrics_port:
        places.append((settings.metrics_host, settings.metrics_port))
    try:
        return listen_on(places)
    except OSError as error:
        ports = " or ".join(str(port) for _, port in places)
        raise Unsafe(f"Nothing can listen on port {ports}: {error.strerror}.") from error


def _say_where(settings: Settings) -> None:
    # Programs that read the log as JSON would stumble over a sentence.
    if settings.log_format == "text":
        host = f"[{settings.host}]" if ":" in settings.host else settings.host
        sys.stdout.write(f"Watch page: http://{host}:{settings.port}/watch\n")
        sys.stdout.flush()


def prepare(settings: Settings) -> None:
    """On an empty database: migrate, make an admin key and show it, this once."""
    # Before anything is made, since whoever started us is there to mend it.
    sources_of(settings)
    database = open_database(settings)
    try:
        if is_empty(database):
            migrate(settings.database_url.get_secret_value())
            _show_first_key(database)
        # Found now and told to whoever started us, and not to a log by every child.
        database.check_safe()
        require_current(database)
    finally:
        database.close()


@contextmanager
def sole_server(settings: Settings) -> Iterator[int | None]:
    """
    Hold the lock that keeps a second crew from serving one SQLite file; its descriptor, if any.

    Raises:
        Unsafe: Another process holds it.
    """
    path = sqlite_path(settings)
    if path is None:
        yield None
        return
    with path.with_name(path.name + ".serving").open("w") as lock:
        # The children of a crew that was killed may still be putting down their slices.
        until = time.monotonic() + LEAVE_S
        while not _locked(lock):
            if time.monotonic() > until:
                text = "Another process serves this SQLite file; use PostgreSQL for more than one."
                raise Unsafe(text)
            time.sleep(LOOK_S)
        yield lock.fileno()


def _locked(lock: IO[str]) -> bool:
    try:
        fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    return True


def sqlite_path(settings: Settings) -> Path | None:
    """The file of a SQLite database, else None."""
    url = settings.database_url.get_secret_value()
    return Path(url.removeprefix("sqlite:///")) if url.startswith("sqlite:///") else None


def _show_first_key(database: Database) -> None:
    key, bearer = keys.add(database, "first", ["admin"])
    sys.stdout.write(
        f"This database was empty. Its admin key ({key.id}) is shown this once:\n\n  {bearer}\n\n"
    )
    # At once, for the server may end in many ways and the key is never shown again.
    sys.stdout.flush()
