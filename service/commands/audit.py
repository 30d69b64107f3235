"""bidkeel audit: V1 to V7 on the database as it is, and the figure of V8."""

from __future__ import annotations

import argparse
import json
import sys
from dataclasses import asdict

from service.connecting import open_database
from service.money import nanos_text
from service.settings import load
from service.store.audit import CHECKS, audit, unfunded
from service.store.migrate import require_current


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Only the form of the answer."""
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(arguments: argparse.Namespace) -> int:
    """Exit code 0 when every promise holds, 3 when one does not."""
    database = open_database(load())
    try:
        require_current(database)
        # One view, or money that moves between two reads would look like a difference.
        found, loose = database.read(lambda c: (audit(c), unfunded(c)))
    finally:
        database.close()
    if arguments.json:
        told = {"findings": [asdict(f) for f in found], "unfunded": nanos_text(loose)}
        sys.stdout.write(json.dumps(told) + "\n")
    else:
        for finding in found:
            sys.stdout.write(f"{finding.line_item}: {finding.check}: off by {finding.off}\n")
        sys.stdout.write(f"{len(CHECKS)} checks and a replay: {len(found)} differences.\n")
        sys.stdout.write(f"V8: {nanos_text(loose)} units of currency are unfunded.\n")
    return 3 if found else 0
