"""How bids and lessons fare as the stream of one line item grows.

The stream is filled without a server, in the way of workers and clerk: money is leased, wins and
values are booked in groups, and after each few thousand the teacher folds what is new.
"""

from __future__ import annotations

import argparse
import secrets
import statistics
import time
from collections.abc import Iterator, Sequence
from contextlib import closing
from dataclasses import dataclass
from functools import partial

from service.commands import bodies, figures, growth_fresh
from service.commands.figures import Figure
from service.commands.growth_ground import FLAT_MAX, Ground, Say, asked, by_turns, flat
from service.commands.server_process import ServerFailed, ServerProcess
from service.learner import hashing
from service.ledger.settle import Outcome
from service.ledger.values import Value
from service.store import auditing, charting, leases, outcomes, teachers
from service.store.bookings import Booking
from service.store.database import Database
from service.store.leases import Denied, Leased, LeaseRequest
from service.teaching import lawful, lesson, weigh

FEW = 10
BID, PAID, VALUE = 1_000_000, 410_000, 10_000_000  # Nanos: 1 CPM, 0.41 CPM, a cent.
WINS_OF_A_VALUE = 20
GROUP, PAGE = 500, 2000  # Outcomes of one transaction, and until the teacher has its turn.
LEASE_S = 30
CHECKPOINT_ENTRIES = 10_000
FEATURE_KEY = b"bench"


@dataclass(frozen=True, slots=True)
class Page:
    """One turn of the teacher: processor seconds for so many entries."""

    entries: int
    processor_s: float


async def lessons(ground: Ground, arguments: argparse.Namespace, say: Say) -> list[Figure]:
    """From ten lessons to many, for a line item of each method."""
    pairs = {method: (f"few-{method}", f"many-{method}") for method in arguments.method}
    configs = [bodies.line_item(one, method) for method, both in pairs.items() for one in both]
    server, _ = await ground.server("lessons", configs)
    # The fill has the database to itself, and the server finds all of it learnt.
    server.stop()
    pages = dict[str, list[Page]]()
    with closing(Database(server.environment["BIDKEEL_DATABASE_URL"])) as database:
        for few, many in pairs.values():
            fill(database, few, FEW, say)
            pages[many] = fill(database, many, arguments.lessons, say)
    server.start()
    found = list[Figure]()
    for method, (few, many) in pairs.items():
        say(f"bids and freshness of {method} after {arguments.lessons:,} lessons")
        name = f"{method}, {FEW} to {arguments.lessons:,} lessons"
        sides = [asked(server, [one]) for one in (few, many)]
        found += flat(name, *await by_turns(sides, arguments))
        found += _taught(name, pages[many])
        found += await _moved(name, server, few, many, arguments.probes)
    return found


def _taught(name: str, pages: Sequence[Page]) -> list[Figure]:
    """The first pages against the last, by processor time, since they lie minutes apart."""
    share = max(1, len(pages) // 20)
    # By the entry and not by the page: some pages are a rest of a few entries.
    first_us, last_us = (
        1e6 * sum(one.processor_s for one in part) / sum(one.entries for one in part)
        for part in (pages[:share], pages[-share:])
    )
    named = f"{name}, teaching an entry"
    return [
        Figure(f"{named}, after over before", last_us / first_us, "times", aim=FLAT_MAX),
        Figure(f"{named} after", last_us, "us"),
    ]


async def _moved(
    name: str, server: ServerProcess, few: str, many: str, probes: int
) -> list[Figure]:
    """Outcome to moved price of both line items by turns, with nothing else going on."""
    waits: dict[str, list[float]] = {few: [], many: []}
    async with server.wire() as wire:
        for _ in range(probes):
            for one, found in waits.items():
                found.append(1000.0 * await growth_fresh.moved_s(wire, one))
    before, after = (statistics.median(found) for found in waits.values())
    return [
        Figure(
            f"{name}, outcome until its price moves, p50 after over before",
            after / before,
            "times",
            aim=FLAT_MAX,
        ),
        figures.of_rounds(f"{name}, outcome until its price moves, after", "ms", waits[many]),
    ]


def fill(database: Database, name: str, count: int, say: Say) -> list[Page]:
    """Book and teach so many lessons, then count and audit them as the clerk would."""
    lessons, pages, done = _bookings(database, name), list[Page](), 0
    page = min(PAGE, max(1, count // FEW))
    while done < count:
        size = min(page, count - done)
        for at in range(0, size, GROUP):
            outcomes.book(database, [next(lessons) for _ in range(min(GROUP, size - at))], weigh)
        pages += _teach(database, name)
        done += size
        say(f"{name}: {done:,} of {count:,} lessons")
    while charting.roll(database):
        pass
    # Else the server would begin with it, in the middle of what is timed.
    while not auditing.audit_on(database, [name])[0][0].whole:
        pass
    return pages


def _teach(database: Database, name: str) -> Iterator[Page]:
    """Until the teacher has caught up."""
    teach = partial(teachers.teach, fold=lesson, lawful=lawful)
    entries = teachers.ENTRIES_MAX
    while entries == teachers.ENTRIES_MAX:
        began_s = time.process_time()
        entries = teach(database, name, checkpoint_entries=CHECKPOINT_ENTRIES)
        if entries:
            yield Page(entries, time.process_time() - began_s)


def _bookings(database: Database, name: str) -> Iterator[Booking]:
    """A win of every bid that the slices pay for, and a value for one win in twenty."""
    hashed, number = hashing.hashed(bodies.FEATURES, FEATURE_KEY), 0
    seen = hashing.to_bytes(hashed)
    for held in _slices(database, name):
        for counter in range(held.amount // BID):
            bid = ((int.from_bytes(held.slice_id) + counter) % 2**128).to_bytes(16)
            won = Outcome("won", bid, counter, BID, "north-exchange", PAID)
            yield Booking(name, won, held.slice_id, held.day, features=seen)
            number += 1
            if number % WINS_OF_A_VALUE == 0:
                yield Booking(name, Value(bid, "sale", VALUE))


def _slices(database: Database, name: str) -> Iterator[Leased]:
    before = 0
    while True:
        wish = LeaseRequest(name, secrets.token_bytes(16), PAGE * BID, before)
        (answer,) = leases.lease(database, "bench", [wish], LEASE_S)
        if isinstance(answer, Denied):
            raise ServerFailed(f"No money for {name}: {answer.reason}")
        before = answer.amount
        yield answer
