"""bidkeel rebuild: fold learners from zero and compare with checkpoints and what is published."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import asdict

from service.api.times import milliseconds
from service.commands.report import progress
from service.connecting import open_database
from service.errors import Malformed
from service.settings import load
from service.store import line_items, rebuilds, records
from service.store.database import Database, Reading
from service.store.migrate import require_current
from service.store.rebuilds import Rebuilt
from service.teaching import FRESH, lesson

PAGE = 200


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Which line item, up to where, and the form of the answer."""
    parser.add_argument("line_item", nargs="?", help="one line item instead of all")
    parser.add_argument("--to", help="an earlier seq, or a time such as 2026-12-01T09:00:00Z")
    parser.add_argument("--json", action="store_true", help="one JSON object, no progress")


def run(arguments: argparse.Namespace) -> int:
    """Exit code 0 when every fold agrees, 3 when one does not."""
    database = open_database(load())
    try:
        require_current(database)
        names = [arguments.line_item] if arguments.line_item else database.read(_names)
        with ExitStack() as stack:
            bar = None if arguments.json else stack.enter_context(progress())
            rebuilt = []
            for name in names:
                task = None if bar is None else bar.add_task(name, total=None)

                # Bound as a default, or every fold would move the bar of the last line item.
                def seen(seq: int, task: object = task) -> None:
                    if bar is not None:
                        bar.update(task, completed=seq)  # type: ignore[arg-type]

                rebuilt.append(_rebuild(database, name, arguments.to, seen))
    finally:
        database.close()
    _tell(rebuilt, as_json=arguments.json)
    return 3 if any(one.differences for one in rebuilt) else 0


def _rebuild(database: Database, name: str, to: str | None, seen: Callable[[int], None]) -> Rebuilt:
    def work(connection: Reading) -> Rebuilt:
        line_items.one(connection, name)
        until = None if to is None else _seq(connection, name, to)
        return rebuilds.rebuild(connection, name, until, FRESH, lesson, seen)

    # One view, so that nothing new is learnt between the folds that are compared.
    return database.read(work)


def _seq(connection: Reading, name: str, to: str) -> int:
    if to.isascii() and to.isdigit():
        return int(to)
    try:
        return records.seq_before(connection, name, milliseconds(to) + 1)
    except ValueError as error:
        raise Malformed("bad_time", f"--to: {error}") from error


def _names(connection: Reading) -> list[str]:
    names, page = list[str](), line_items.page(connection, None, PAGE)
    while page:
        names += [row.id for row in page]
        page = line_items.page(connection, names[-1], PAGE)
    return names


def _tell(rebuilt: list[Rebuilt], *, as_json: bool) -> None:
    if as_json:
        sys.stdout.write(json.dumps({"rebuilt": [asdict(one) for one in rebuilt]}) + "\n")
        return
    for one in rebuilt:
        began = f"checkpoint {one.checkpoint}" if one.checkpoint else "no checkpoint"
        said = "; ".join(one.differences) or "equal"
        sys.stdout.write(f"{one.line_item}: {one.seq} entries, {began}: {said}\n")
