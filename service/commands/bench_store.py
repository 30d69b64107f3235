"""`bidkeel bench store`: what the rows of a bid's life cost in the database, step by step.

Apart from the bench of the edge: no server, no HTTP, only what the stories ask of the store.
"""

from __future__ import annotations

import argparse
import json
import secrets
import sys
import tempfile
import time
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import closing, contextmanager
from dataclasses import asdict, dataclass, replace
from functools import partial
from pathlib import Path
from typing import Any

from rich.console import Console

from service.commands import options, report
from service.commands.postgresql_process import PostgreSQLProcess
from service.commands.profiling import add_profile, profiled
from service.errors import BrokenPromise
from service.ledger.settle import Outcome
from service.store import (
    auditing,
    charting,
    decisions,
    learners,
    leases,
    line_items,
    outcomes,
    teachers,
)
from service.store.audit import Balance
from service.store.bookings import Booking
from service.store.database import Database, Writing
from service.store.leases import Denied, Leased, LeaseRequest
from service.store.migrate import migrate
from service.teaching import FRESH, lawful, lesson, weigh

UNIT, BID, PAID = 10**9, 1_000_000, 410_000  # Nanos: one unit of currency, 1 CPM, 0.41 CPM.
GROUP = 100  # Outcomes in one transaction.
LOGGED = 500  # Decisions in one transaction.
LEASE_S = 30
GARDENS = 20  # Line items that lease at the same moment.
CHECKPOINT_ENTRIES = 10_000


@dataclass(frozen=True, slots=True)
class Step:
    """What so many rows took: seconds on the wall, processor seconds of this process."""

    name: str
    rows: int
    wall_s: float
    processor_s: float


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--rows", type=options.count, default=20_000, help="of each kind")
    parser.add_argument("--database", choices=("sqlite", "postgresql"), default="sqlite")
    parser.add_argument("--json", action="store_true", help="print figures for a program")
    add_profile(parser)


def run(arguments: argparse.Namespace) -> int:
    """
    Lease, book, log and teach on a database of its own, which is deleted.

    Returns:
        0 when every row was taken as meant; 3 when one was not.
    """
    with _database(arguments.database) as database, report.progress() as bar:
        task = bar.add_task("Rows", total=6 * arguments.rows)
        with profiled(arguments.profile):
            steps = measured(database, arguments.rows, lambda done: bar.advance(task, done))
    if arguments.json:
        figures = {"database": arguments.database, "steps": [asdict(step) for step in steps]}
        sys.stdout.write(json.dumps(figures) + "\n")
    else:
        _show(steps, arguments)
    return 0 if all(step.rows for step in steps) else 3


def measured(database: Database, rows: int, advance: Callable[[int], object]) -> list[Step]:
    """Each step on what the steps before it have left; `rows` is made a whole number of groups."""
    rows = max(GROUP, rows - rows % GROUP)
    names = [f"bench-{number}" for number in range(GARDENS)]
    for name in names:
        database.write(partial(_begin, config=_config(name), now=database.wall_ms()))
    slices, leased = _leased(database, names, max(1, rows // GROUP), advance)
    groups = _groups(slices, rows // GROUP)
    booked = _timed("wins, 100 a group", groups, partial(_book, database), advance)
    logs = [_decisions(names[0], min(LOGGED, rows)) for _ in range(max(1, rows // LOGGED))]
    logged = _timed("decisions logged, 500 at once", logs, partial(_log, database), advance)
    taught = _drained("entries taught", partial(_teach, database, names), advance)
    charted = _drained("entries counted for charts", partial(charting.roll, database), advance)
    audited = _audited(database, names[0], advance)
    return [booked, logged, leased, taught, charted, audited]


def _timed(
    name: str, pieces: Iterable[Any], work: Callable[[Any], int], advance: Callable[[int], object]
) -> Step:
    wall_s, processor_s, rows = time.perf_counter(), time.process_time(), 0
    for piece in pieces:
        done = work(piece)
        rows += done
        advance(done)
    return Step(name, rows, time.perf_counter() - wall_s, time.process_time() - processor_s)


def _drained(name: str, work: Callable[[], int], advance: Callable[[int], object]) -> Step:
    """The same piece of work again and again, until it finds nothing more to do."""
    return _timed(name, iter(work, 0), int, advance)


def _leased(
    database: Database, names: list[str], rounds: int, advance: Callable[[int], object]
) -> tuple[list[Leased], Step]:
    """Slices of all line items by turns; those of the first are what is bid from."""
    found, before = list[Leased](), dict.fromkeys(names, 0)

    def lease(_: int) -> int:
        wishes = [
            LeaseRequest(name, secrets.token_bytes(16), GROUP * BID, before[name]) for name in names
        ]
        answers = leases.lease(database, "bench", wishes, LEASE_S)
        taken = [answer for answer in answers if not isinstance(answer, Denied)]
        before.update((one.line_item, one.amount) for one in taken)
        found.extend(taken)
        return len(taken)

    step = _timed("leases, 20 at once", range(rounds), lease, advance)
    return [one for one in found if one.line_item == names[0]], step


def _groups(slices: list[Leased], count: int) -> list[list[Booking]]:
    """Wins of bids that each slice could pay for, a hundred to a group."""
    bookings = (_win(held, counter) for held in slices for counter in range(held.amount // BID))
    return [[next(bookings) for _ in range(GROUP)] for _ in range(count)]


def _win(held: Leased, counter: int) -> Booking:
    bid = ((int.from_bytes(held.slice_id) + counter) % 2**128).to_bytes(16)
    outcome = Outcome("won", bid, counter, BID, "north-exchange", PAID)
    return Booking(held.line_item, outcome, held.slice_id, held.day, features=b"garden" * 4)


def _book(database: Database, group: list[Booking]) -> int:
    return sum(one.status == "recorded" for one in outcomes.book(database, group, weigh))


def _log(database: Database, rows: list[decisions.Decision]) -> int:
    decisions.log(database, rows)
    return len(rows)


def _decisions(name: str, count: int) -> list[decisions.Decision]:
    row = {"at_ms": 0, "line_item": name, "ref": "r" * 22, "request_id": "op-81f2"}
    row |= {"source": "north-exchange", "floor": 400_000, "price": BID, "reason": None}
    row |= {"set_by": "value", "snapshot": 1, "test": 0, "auction": "second"}
    return [{**row, "at_ms": place} for place in range(count)]


def _teach(database: Database, names: list[str]) -> int:
    fold = partial(teachers.teach, fold=lesson, lawful=lawful)
    return sum(fold(database, name, checkpoint_entries=CHECKPOINT_ENTRIES) for name in names)


def _audited(database: Database, name: str, advance: Callable[[int], object]) -> Step:
    """The whole stream of one line item, piece by piece."""
    rows = database.read(partial(Balance.read, line_item=name)).seq
    pieces = iter(partial(_more_to_audit, database, name), 0)
    step = _timed("entries audited", pieces, int, advance)
    return replace(step, rows=rows)


def _more_to_audit(database: Database, name: str) -> int:
    (piece,), _ = auditing.audit_on(database, [name])
    if piece.found:
        raise BrokenPromise(f"the bench broke a promise: {piece.found}")
    return 0 if piece.whole else auditing.ENTRIES_MAX


def _begin(connection: Writing, config: Mapping[str, Any], now: int) -> None:
    line_items.create(connection, config, now)
    learners.begin(connection, config["id"], FRESH, now)


def _config(name: str) -> dict[str, Any]:
    """A line item of an invented garden, as the stories keep it, with money for everything."""
    value = {"ceiling": 20_000_000, "typical": 10_000_000, "arrival": "accrues"}
    value |= {
        "window_ms": 604_800_000,
        "delay_mean_ms": None,
        "expected": {"per_impression": 4 * BID, "conversions": 1},
    }
    return {
        "id": name,
        "name": "Bench of the alpine garden",
        "currency": "EUR",
        "budget": 1_000_000 * UNIT,
        "daily_budget": None,
        "bid_cap": 8 * BID,
        "auction": "second",
        "flight": {"starts_ms": 0, "ends_ms": None, "time_zone": "UTC"},
        "spend_on": "won",
        "grace_ms": 900_000,
        "billing_grace_ms": 86_400_000,
        "strict": False,
        "value": value,
        "policy": {"method": "kl-ucbid"},
        "pacing": {"method": "none"},
    }


@contextmanager
def _database(kind: str) -> Iterator[Database]:
    if kind == "sqlite":
        with tempfile.TemporaryDirectory() as folder:
            url = f"sqlite:///{Path(folder) / 'bench.sqlite'}"
            migrate(url)
            with closing(Database(url)) as database:
                yield database
        return
    with PostgreSQLProcess() as server:
        migrate(server.url)
        with closing(Database(server.url)) as database:
            yield database


def _show(steps: list[Step], arguments: argparse.Namespace) -> None:
    rows = {
        step.name: (
            f"{step.rows:,}",
            f"{step.rows / step.wall_s:,.0f}",
            f"{1e6 * step.processor_s / max(step.rows, 1):,.1f}",
        )
        for step in steps
    }
    heads = ["rows", "rows a second", "processor us a row"]
    console = Console(width=120)
    console.print(report.table(f"{arguments.database}, one thread", heads, rows))
    console.print(
        "Processor time is this process's own; that of a PostgreSQL server is not in it. Every "
        "transaction is durable before the next one begins.",
        highlight=False,
    )
