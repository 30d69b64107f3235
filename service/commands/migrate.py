"""bidkeel migrate: bring the database to the schema of this release."""

from __future__ import annotations

import argparse
import sys

from service.settings import load
from service.store.migrate import migrate


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """No arguments: the database is a setting."""


def run(arguments: argparse.Namespace) -> int:
    """Migrate; harmless when there is nothing to do."""
    migrate(load().database_url.get_secret_value())
    sys.stdout.write("The database is at the schema of this release.\n")
    return 0
