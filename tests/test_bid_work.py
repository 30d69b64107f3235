"""How much work one bid is, in calls of functions and statements, which no busy machine changes.

Measured when written and bounded a little above; whoever makes a bid dearer sees it here first.
"""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Callable
from types import FrameType

import pytest

from service.api import answers
from service.api.body import parse_object
from service.api.forms.bids import read_batch, read_bid
from service.bidding import Answer
from service.commands.bodies import FEATURES
from service.guard.ticket import Ticket, TicketKeys
from tests.builders import CAP, NAME, Worker, working

on_sqlite = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)

ASKED = {
    **{"request_id": "op-81f2", "line_item": NAME, "source": "north-exchange"},
    **{"auction": "second", "floor_cpm": 0.0001, "features": {"device": "phone", "hour": 13}},
    **{"value_hint": None, "deadline_ms": 80, "test": False},
}
ONE = json.dumps(ASKED).encode()
MANY = json.dumps({"opportunities": [ASKED] * 100}).encode()
TICKET = Ticket(NAME, "north-exchange", b"s" * 16, 3, 1234, 812, 739_000, b"i" * 8)


def calls(work: Callable[[], object]) -> int:
    """How many functions, ours and the interpreter's own, a piece of work calls."""
    count = 0

    def note(_frame: FrameType, event: str, _what: object) -> None:
        nonlocal count
        count += event in ("call", "c_call")

    # What is cached on first use is not counted.
    work()
    sys.setprofile(note)
    try:
        work()
    finally:
        sys.setprofile(None)
    return count


def priced(worker: Worker, body: bytes) -> Answer:
    """The answer to one body, from a bid that has nothing to wait for."""
    opportunity, _ = read_bid(parse_object(body))
    asked = worker.bidder.bid(opportunity, time.monotonic())
    with pytest.raises(StopIteration) as ended:
        asked.send(None)
    answer: Answer = ended.value.value
    return answer


@pytest.mark.anyio
@on_sqlite
async def test_a_bid_with_money_in_hand_waits_for_nothing(migrated_url: str) -> None:
    """Its coroutine ends at the first step: no task, no thread and so no statement."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(3)
        assert priced(worker, ONE).bid is not None


@pytest.mark.anyio
@on_sqlite
async def test_a_bid_is_few_calls(migrated_url: str) -> None:
    """From the bytes that came to the bytes that leave, the framework left out."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(3)

        def whole() -> object:
            return answers.quick_answer(answers.bid(priced(worker, ONE)))

        assert calls(whole) <= 190


@pytest.mark.anyio
@on_sqlite
async def test_a_bid_by_features_is_few_calls_more(migrated_url: str) -> None:
    """Five features are hashed, valued and signed."""
    async with working(migrated_url) as worker:
        one = {"ceiling": CAP, "typical": CAP // 2}
        policy = {"method": "linear", "dimensions": 32}
        await worker.create(policy=policy, value=one)
        await worker.bids(3)
        said = json.dumps({**ASKED, "features": FEATURES}).encode()
        assert priced(worker, said).method == "linear"
        assert calls(lambda: priced(worker, said)) <= 245


def test_reading_a_batch_grows_by_few_calls_a_row() -> None:
    """A hundred rows are validated at once."""
    members = parse_object(MANY)
    assert calls(lambda: read_batch(members, 500)) <= 100 * 53


def test_bytes_are_parsed_in_one_call() -> None:
    """The parser of the interpreter is there for what the quick one refuses."""
    assert calls(lambda: parse_object(MANY)) <= 5


def test_a_ticket_is_few_calls() -> None:
    """Signing and reading back one that has nothing unusual."""
    keys = TicketKeys([b"k" * 32])
    text = keys.sign(TICKET)
    assert calls(lambda: keys.sign(TICKET)) <= 15
    assert calls(lambda: keys.verify(text)) <= 30
