"""bidkeel backup: a consistent copy of the database, written while it is served."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

from service.connecting import open_database
from service.settings import load
from service.store.backups import back_up
from service.store.migrate import require_current


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Where it goes."""
    parser.add_argument("file", type=Path, help="the file to write; it must not exist")


def run(arguments: argparse.Namespace) -> int:
    """Write the copy; the file has its name only once it is whole and durable."""
    settings = load()
    database = open_database(settings)
    try:
        require_current(database)
    finally:
        database.close()
    back_up(settings.database_url.get_secret_value(), arguments.file)
    size_kb = arguments.file.stat().st_size // 1024
    sys.stdout.write(f"{arguments.file}: {size_kb} KiB. It holds keys: keep it as secret.\n")
    return 0
