"""bidkeel restore: put a backup in place of the database; every spend is then confirmed."""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

from service.commands.serve import sole_server
from service.connecting import open_database
from service.settings import load
from service.store.backups import restore
from service.store.migrate import require_current

NEXT = """Every line item now waits for its spend: nothing is leased until somebody confirms it by
POST /v1/line-items/{id}/reconcile with {"reason": …, "spent": …}. Tickets from before are booked
from free money when their outcomes come.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Where it comes from."""
    parser.add_argument("file", type=Path, help="what bidkeel backup has written")


def run(arguments: argparse.Namespace) -> int:
    """Restore while nobody serves; the database from before is kept beside on SQLite."""
    settings = load()
    # A worker that served on would lease from books that are no more.
    with sole_server(settings):
        url = settings.database_url.get_secret_value()
        kept = restore(url, arguments.file, time.time_ns() // 1_000_000)
    if kept is not None:
        sys.stdout.write(f"The database from before is kept as {kept}.\n")
    # It may be of an older release, and must then be migrated before it is served.
    database = open_database(settings)
    try:
        require_current(database)
    finally:
        database.close()
    sys.stdout.write(NEXT)
    return 0
