"""How much work one outcome is, in calls of functions, which no busy machine changes.

Measured when written and bounded a little above; whoever makes an outcome dearer sees it here
first. What does not grow with the rows of a call is bounded by its statements, elsewhere.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from functools import partial

import pytest

from service.api.body import parse_object
from service.api.forms.outcomes import read_outcomes
from service.feedback import Report
from service.learner.exptree_lessons import Lesson, Won
from service.learner.growing import grow, law_of
from service.learner.rules import tree_rules
from service.store import outcomes
from service.store.bookings import Booking
from service.teaching import weigh
from tests.builders import CAP, Worker, line_item, working
from tests.test_bid_work import calls

on_sqlite = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
FEW, MANY = 10, 60
KINDS = ("won", "lost", "billed")


def told(tickets: list[str | None], kind: str) -> bytes:
    """One call about all of these bids."""
    price = {} if kind == "lost" else {"clearing_cpm": 0.41}
    return json.dumps(
        {"outcomes": [{"ticket": t, "kind": kind, **price} for t in tickets]}
    ).encode()


def reports(body: bytes) -> list[Report]:
    """The rows of a call, all of them sound."""
    rows, _ = read_outcomes(parse_object(body), MANY)
    return [row for row in rows if isinstance(row, Report)]


def read(worker: Worker, body: bytes) -> list[Booking]:
    """What a call asks of the books."""
    rows = [worker.feedback._reader.read(report) for report in reports(body)]
    return [row for row in rows if isinstance(row, Booking)]


def for_a_row(work: Callable[[int], object]) -> float:
    """Calls that each row costs beyond those of the whole."""
    return (calls(partial(work, MANY)) - calls(partial(work, FEW))) / (MANY - FEW)


async def tickets(worker: Worker, count: int) -> list[str | None]:
    """Those of so many bids."""
    return [answer.ticket for answer in await worker.bids(count)]


@pytest.mark.anyio
@on_sqlite
@pytest.mark.parametrize("kind", KINDS)
async def test_reading_an_outcome_is_few_calls(migrated_url: str, kind: str) -> None:
    """From the bytes that came to what is asked of the books, with its ticket verified."""
    async with working(migrated_url) as worker:
        await worker.create()
        sold = await tickets(worker, MANY)
        bodies = {count: told(sold[:count], kind) for count in (FEW, MANY)}

        def work(count: int) -> None:
            assert len(read(worker, bodies[count])) == count

        assert for_a_row(work) <= 72


@pytest.mark.anyio
@on_sqlite
@pytest.mark.parametrize(("kind", "calls_max"), [("won", 31), ("lost", 28), ("billed", 70)])
async def test_booking_an_outcome_is_few_calls(
    migrated_url: str, kind: str, calls_max: int
) -> None:
    """From what is asked of the books to the commit; each group is new to them."""
    async with working(migrated_url) as worker:
        await worker.create()
        groups = {
            count: [read(worker, told(await tickets(worker, count), kind)) for _ in range(2)]
            for count in (FEW, MANY)
        }

        def work(count: int) -> None:
            booked = outcomes.book(worker.database, groups[count].pop(), weigh)
            assert {one.status for one in booked} == {"recorded"}

        assert for_a_row(work) <= calls_max


def test_a_law_is_read_once_for_all_its_outcomes() -> None:
    """What an outcome carries of the law of its bid costs the same however many steps that has."""
    config = line_item(policy={"method": "exptree"})
    rules = tree_rules(config)
    assert rules is not None
    lessons: list[Lesson] = [Won(price, 0.5, (0, 0), 1) for price in range(100_000, CAP, 100_000)]
    law = law_of(grow(b"", lessons, rules), rules).to_bytes()
    assert calls(lambda: weigh(law, "won", CAP // 2, CAP // 4, config)) <= 27
