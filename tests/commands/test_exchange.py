"""The exchange settles second-price auctions and keeps books that do not rest on the service."""

from __future__ import annotations

import asyncio
import json
from collections import Counter
from collections.abc import Callable, Mapping
from typing import Any

import pytest

from service import money
from service.commands.caller import Unanswered
from service.commands.exchange import Auction, Book, Exchange
from service.commands.wire import Reply

BID = money.price(2)


class SmallService:
    """Answers like the service with one fixed bid, and keeps every outcome it was told."""

    def __init__(self, bid_cpm: float | None = 2.0, status: str = "recorded") -> None:
        self.bid_cpm = bid_cpm
        self.status = status
        self.groups: list[list[dict[str, Any]]] = []

    async def get(self, path: str) -> Reply:
        """Know nothing that could be fetched."""
        return Reply(404, path.encode())

    async def post(self, path: str, body: Mapping[str, Any]) -> Reply:
        """Answer a bid or a group of outcomes, after letting the other bids go first."""
        await asyncio.sleep(0)
        if path == "/v1/outcomes":
            return reply({"results": self.results(body["outcomes"])})
        return reply(self._bid(body["request_id"]))

    def results(self, outcomes: list[dict[str, Any]]) -> list[dict[str, str]]:
        """One result for each outcome."""
        self.groups.append(outcomes)
        return [{"ref": "r", "status": self.status, "code": "some_code"}] * len(outcomes)

    def _bid(self, request_id: str) -> dict[str, object]:
        if self.bid_cpm is None:
            return {"bid_cpm": None, "pass": "budget_spent", "ticket": None, "ref": None}
        names = {"ticket": f"t-{request_id}", "ref": f"r-{request_id}"}
        return {"bid_cpm": self.bid_cpm, "pass": None, **names}


class Forgetful(SmallService):
    """Answers a group of outcomes with no results."""

    def results(self, outcomes: list[dict[str, Any]]) -> list[dict[str, str]]:
        """No result at all."""
        return []


class Away(SmallService):
    """Answers every request with 503."""

    async def post(self, path: str, body: Mapping[str, Any]) -> Reply:
        """Refuse."""
        return Reply(503, b"away")


def reply(body: object) -> Reply:
    """A good answer with a JSON body."""
    return Reply(200, json.dumps(body).encode())


def play(
    service: SmallService,
    auctions: list[Auction],
    advance: Callable[[int], None] = lambda count: None,
) -> Book:
    """Play the auctions against what answers, and return the line item's book."""
    exchange = Exchange(service)
    asyncio.run(exchange.play(auctions, advance))
    return exchange.books["item"]


def auction(rival: int, value: int | None = 0, number: int = 1) -> Auction:
    """One impression for the line item of these tests."""
    return Auction("item", number, rival, value)


def test_a_win_costs_exactly_the_highest_competing_bid() -> None:
    """Ours wins when it is above the rival by one nano, and the rival's bid is the price."""
    service = SmallService()
    book = play(service, [auction(BID - 1, 5_000_000)])
    assert (book.wins, book.losses, book.charged) == (1, 0, BID - 1)
    assert (book.earned, book.surplus, book.bid_max) == (5_000_000, 5_000_001 - BID, BID)


def test_a_tie_is_lost_and_costs_nothing() -> None:
    """An equal competing bid wins, and the service hears that we were beaten."""
    service = SmallService()
    book = play(service, [auction(BID)])
    assert (book.wins, book.losses, book.charged) == (0, 1, 0)
    assert service.groups == [[{"ticket": "t-a-1", "kind": "lost"}]]


def test_a_win_is_reported_before_its_value_and_both_exactly() -> None:
    """Price and value arrive as the exchange knows them, to the last nano."""
    service = SmallService()
    play(service, [auction(1_234_567, 1)])
    won, value = service.groups[0]
    assert won == {"ticket": "t-a-1", "kind": "won", "clearing_cpm": 1.234567}
    assert value == {
        "ref": "r-a-1",
        "kind": "value",
        "value": "0.000000001",
        "event_id": "v-1",
    }


def test_of_an_impression_that_brings_no_news_only_the_win_is_reported() -> None:
    """None is silence, while a value of zero is a report."""
    silent, zero = SmallService(), SmallService()
    play(silent, [auction(1, None)])
    play(zero, [auction(1, 0)])
    assert [row["kind"] for row in silent.groups[0]] == ["won"]
    assert [row["kind"] for row in zero.groups[0]] == ["won", "value"]


def test_a_pass_is_counted_with_its_reason_and_reports_nothing() -> None:
    """Without a ticket there is no outcome."""
    service = SmallService(bid_cpm=None)
    book = play(service, [auction(1), auction(1, number=2)])
    assert book.passes == Counter({"budget_spent": 2})
    assert (book.auctions, book.wins, service.groups) == (2, 0, [])


def test_every_outcome_is_reported_once_in_groups_the_service_takes() -> None:
    """Many bids in flight lose, repeat or overfill nothing, and progress counts them all."""
    service = SmallService()
    advanced: list[int] = []
    auctions = [auction(BID + 1 - number % 3, 7, number) for number in range(3000)]
    book = play(service, auctions, advanced.append)
    rows = [row for group in service.groups for row in group]
    named = Counter((row.get("ticket") or row["ref"], row["kind"]) for row in rows)
    assert set(named.values()) == {1}
    assert len(rows) == book.losses + 2 * book.wins == sum(book.statuses.values())
    assert (book.auctions, book.wins, sum(advanced)) == (3000, 1000, 3000)
    assert max(len(group) for group in service.groups) <= 1000


def test_a_refused_outcome_stops_the_run() -> None:
    """Books that the service does not share would compare nothing."""
    service = SmallService(status="refused")
    with pytest.raises(Unanswered, match="refused: some_code"):
        play(service, [auction(1)])


def test_an_answer_of_another_status_stops_the_run() -> None:
    """The status and the words of the answer stand in the error."""
    with pytest.raises(Unanswered, match="answered 503: away"):
        play(Away(), [auction(1)])


def test_an_outcome_without_a_result_stops_the_run() -> None:
    """A group whose results are fewer than its rows cannot be filed."""
    with pytest.raises(Unanswered, match="did not answer every outcome"):
        play(Forgetful(), [auction(1)])
