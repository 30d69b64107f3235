"""The advertiser's side over HTTP: line items made, states read; apart from the exchange's."""

from __future__ import annotations

import asyncio
import json
import time
from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal
from typing import Any, Protocol

from service import money
from service.commands.wire import Reply
from service.errors import BidkeelError

TAUGHT_S_MAX = 60.0
_POLL_S = 0.2
_SAID_BYTES_MAX = 300


class Unanswered(BidkeelError):
    """The service answered in a way the caller cannot go on with."""


@dataclass(frozen=True, slots=True)
class Learnt:
    """What a line item's state says at the end; money in nanos, values per impression.

    Attributes:
        known: Wins whose value is known.
        awaited: Wins whose window is still open; they count by their age.
        behind: Entries of the stream that are not taught yet.
    """

    budget: int
    spent: int
    known: int
    awaited: int
    behind: int
    mean: int
    low: int
    high: int


class Service(Protocol):
    """What answers over HTTP: a wire to a server, or something small in a test."""

    async def get(self, path: str) -> Reply:
        """Fetch a path."""
        ...

    async def post(self, path: str, body: Mapping[str, object]) -> Reply:
        """Send a JSON body to a path."""
        ...


def read(reply: Reply, status: int = 200) -> dict[str, Any]:
    """
    Read a JSON answer, its numbers as exact decimals.

    Raises:
        Unanswered: The answer has another status.
    """
    if reply.status != status:
        said = reply.content[:_SAID_BYTES_MAX].decode(errors="replace")
        raise Unanswered(f"The service answered {reply.status}: {said}")
    answer: dict[str, Any] = json.loads(reply.content, parse_float=Decimal)
    return answer


async def create(service: Service, body: Mapping[str, object]) -> None:
    """
    Make a line item.

    Raises:
        Unanswered: It was refused.
    """
    read(await service.post("/v1/line-items", body), 201)


async def learnt(service: Service, line_item: str, wins: int) -> Learnt:
    """
    Wait until all wins and values are taught, then say what was learnt.

    Windows may still be open: they close with the next entry, and no traffic brings one.

    Args:
        service: With a key that may read.
        line_item: Its id.
        wins: How many wins must have been taught.

    Raises:
        Unanswered: They were not taught within `TAUGHT_S_MAX` seconds.
    """
    end = time.monotonic() + TAUGHT_S_MAX
    while True:
        seen = from_state(read(await service.get(f"/v1/line-items/{line_item}/state")))
        taught = seen.known + seen.awaited
        if taught == wins and not seen.behind:
            return seen
        if time.monotonic() > end:
            raise Unanswered(f"{line_item} was taught {taught} of {wins} wins, and no more came.")
        await asyncio.sleep(_POLL_S)


def from_state(state: Mapping[str, Any]) -> Learnt:
    """Read the few members of a state that the tables show."""
    certainty, books = state["certainty"], state["money"]
    return Learnt(
        budget=money.nanos(books["budget"]),
        spent=money.nanos(books["spent"]),
        known=certainty["known"],
        awaited=certainty["awaited"],
        behind=state["learner"]["entries_behind"],
        mean=money.nanos(certainty["mean"] or 0),
        low=money.nanos(certainty["low"]),
        high=money.nanos(certainty["high"]),
    )
