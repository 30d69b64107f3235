"""The clerk's pruning of the decision log alone, so that a bench need not wait an hour for it.

    python -m service.commands.pruner ROWS

It says when it is ready, begins with a line of input, works as the clerk does, and prints how
many rows it forgot in how many seconds. The settings are those of the server of that database.
"""

from __future__ import annotations

import json
import os
import sys
import time
from contextlib import closing

from service.clerk import DAY_MS
from service.commands.child import NICE
from service.connecting import open_database
from service.settings import load
from service.store import decisions
from service.store.database import Database


def main(words: list[str]) -> int:
    """Forget at least so many rows, as far as there are any old enough; returns 0."""
    # As the clerk does, which would do it otherwise.
    os.nice(NICE)
    settings = load()
    with closing(open_database(settings)) as database:
        # Else its own start would fall into what is timed.
        sys.stdout.write("ready\n")
        sys.stdout.flush()
        sys.stdin.readline()
        began = time.monotonic()
        rows = pruned(database, settings.decision_keep_days, int(words[0]))
        said = {"rows": rows, "seconds": time.monotonic() - began}
    sys.stdout.write(json.dumps(said) + "\n")
    return 0


def pruned(database: Database, keep_days: int, rows_max: int) -> int:
    """Prune piece by piece until so many rows are gone or none is old enough."""
    before_ms, rows = database.wall_ms() - keep_days * DAY_MS, 0
    while rows < rows_max:
        piece = database.write(lambda connection: decisions.prune(connection, before_ms))
        if not piece:
            break
        rows += piece
    return rows


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
