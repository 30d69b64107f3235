"""An invented exchange that talks to the service over HTTP, apart because it keeps its own books.

It runs sealed-bid second-price auctions: our bid wins when it is above the highest competing
bid (the reserve counts as one) and then costs exactly that competing bid. A tie is lost.
"""

from __future__ import annotations

import asyncio
from collections import Counter
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field

from service import money
from service.commands.caller import Service, Unanswered, read

IN_FLIGHT = 16
GROUP_ROWS = 100
_SETTLED = frozenset({"recorded", "late", "parked", "duplicate"})


@dataclass(frozen=True, slots=True)
class Auction:
    """
    One impression for sale.

    Attributes:
        number: Unique within a run.
        rival: Highest competing bid, in nanos per impression.
        value: What the impression turns out to be worth if we show it, in nanos;
            None when nothing will ever be heard of it, which is worth nothing.
    """

    line_item: str
    number: int
    rival: int
    value: int | None


@dataclass(slots=True)
class Book:
    """What the exchange itself knows of one line item; money in nanos."""

    auctions: int = 0
    losses: int = 0
    charged: int = 0
    bid_max: int = 0
    won: list[Auction] = field(default_factory=list)
    passes: Counter[str] = field(default_factory=Counter)
    statuses: Counter[str] = field(default_factory=Counter)
    clipped: int = 0

    @property
    def wins(self) -> int:
        """How many auctions we won."""
        return len(self.won)

    @property
    def earned(self) -> int:
        """What the won impressions were worth, in nanos."""
        return sum(auction.value or 0 for auction in self.won)

    @property
    def surplus(self) -> int:
        """What was earned less what was charged, in nanos."""
        return self.earned - self.charged


@dataclass(frozen=True, slots=True)
class Row:
    """One outcome to report, with the line item whose book takes the receipt."""

    line_item: str
    body: dict[str, object]


class Exchange:
    """
    Plays auctions against the service, several bids in flight, outcomes in groups.

    Args:
        service: Where to ask for bids and report outcomes.
    """

    def __init__(self, service: Service) -> None:
        self.service = service
        self.books: dict[str, Book] = {}
        self._waiting: list[Row] = []

    async def play(
        self, auctions: Iterable[Auction], advance: Callable[[int], None] = lambda count: None
    ) -> None:
        """
        Play the auctions in order and report every outcome before returning.

        Args:
            auctions: For sale, one after the other.
            advance: Called with the number of auctions just played.

        Raises:
            Unanswered: The service refused a bid or an outcome.
            OSError: The service cannot be reached.
        """
        queue = iter(auctions)
        try:
            async with asyncio.TaskGroup() as group:
                for _ in range(IN_FLIGHT):
                    group.create_task(self._play_each(queue, advance))
        except ExceptionGroup as failures:
            # Callers handle single errors, and what the others met is most often the same.
            raise failures.exceptions[0] from failures
        await self._report(self._waiting)
        self._waiting = []

    async def _play_each(self, queue: Iterator[Auction], advance: Callable[[int], None]) -> None:
        # All tasks draw from one iterator, so each auction is played once.
        for auction in queue:
            answer = await self._bid(auction)
            self._waiting += self._settle(auction, answer)
            advance(1)
            # A pass may be for money that only our own news sets free.
            if len(self._waiting) >= GROUP_ROWS or (self._waiting and answer["pass"]):
                # Taken before the await, or another task would report the same rows.
                ready, self._waiting = self._waiting, []
                await self._report(ready)

    async def _bid(self, auction: Auction) -> dict[str, object]:
        name = f"a-{auction.number}"
        return await self._post("/v1/bids", {"request_id": name, "line_item": auction.line_item})

    def _settle(self, auction: Auction, answer: dict[str, object]) -> list[Row]:
        book = self.books.setdefault(auction.line_item, Book())
        book.auctions += 1
        if answer["bid_cpm"] is None:
            book.passes[str(answer["pass"])] += 1
            return []
        bid = money.price(answer["bid_cpm"])
        book.bid_max = max(book.bid_max, bid)
        # The rule of ties is the seller's; losing them is the careful guess.
        if bid <= auction.rival:
            book.losses += 1
            return [Row(auction.line_item, {"ticket": answer["ticket"], "kind": "lost"})]
        book.charged += auction.rival
        book.won.append(auction)
        return list(_outcomes_of_a_win(auction, answer))

    async def _report(self, rows: list[Row]) -> None:
        if not rows:
            return
        answer = await self._post("/v1/outcomes", {"outcomes": [row.body for row in rows]})
        results = answer["results"]
        # Results have no names of their own, so a missing one would shift all after it.
        if not isinstance(results, list) or len(results) != len(rows):
            raise Unanswered("The service did not answer every outcome.")
        for row, result in zip(rows, results, strict=True):
            self._file(row, result)

    def _file(self, row: Row, result: dict[str, object]) -> None:
        book = self.books[row.line_item]
        status = str(result["status"])
        if status not in _SETTLED:
            raise Unanswered(f"An outcome was {status}: {result.get('code')}.")
        book.statuses[status] += 1
        book.clipped += bool(result.get("clipped"))

    async def _post(self, path: str, body: dict[str, object]) -> dict[str, object]:
        return read(await self.service.post(path, body))


def _outcomes_of_a_win(auction: Auction, answer: dict[str, object]) -> Iterator[Row]:
    won = {
        "ticket": answer["ticket"],
        "kind": "won",
        "clearing_cpm": money.cpm_number(auction.rival),
    }
    yield Row(auction.line_item, won)
    if auction.value is not None:
        value = {
            "ref": answer["ref"],
            "kind": "value",
            "value": money.nanos_text(auction.value),
            "event_id": f"v-{auction.number}",
        }
        yield Row(auction.line_item, value)
