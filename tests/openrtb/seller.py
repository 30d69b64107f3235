"""An exchange written from the standard alone: it sells over HTTP and keeps books of its own.

It knows nothing of the service but an address and a key: requests and auctions by sections 3 and
4.4.1, notices by plain text replacement (4.4), repeats by the implementation guide, 7.8.
"""

from __future__ import annotations

import asyncio
from collections import Counter
from dataclasses import dataclass, field
from decimal import ROUND_HALF_EVEN, Decimal
from typing import Any

import httpx
import numpy as np

from tests.openrtb.standard import bids_of, faults

INCREMENT = Decimal("0.01")


@dataclass(frozen=True)
class House:
    """
    How one exchange sells.

    Args:
        at: 1 for first price, 2 for second price and an increment.
        rate: What a unit of its currency costs the buyer, for the books.
        deal: Of a private market, if its imps are sold there alone.
    """

    source: str
    at: int
    currency: str
    rate: Decimal = Decimal(1)
    deal: str | None = None
    floor: Decimal = Decimal("0.50")


@dataclass
class Books:
    """What the exchange knows by itself; money in the buyer's nanos."""

    auctions: int = 0
    passes: int = 0
    won: Counter[str] = field(default_factory=Counter)
    told: Counter[str] = field(default_factory=Counter)
    calls: Counter[int] = field(default_factory=Counter)
    faults: list[str] = field(default_factory=list)
    losses: Counter[str] = field(default_factory=Counter)

    @property
    def charged(self) -> int:
        """All that was sold, whether the buyer heard of it or not."""
        return sum(self.won.values())

    @property
    def heard(self) -> int:
        """All of whose sale the buyer was told."""
        return sum(self.told.values())


class Seller:
    """Runs auctions of one house."""

    def __init__(self, house: House, http: httpx.AsyncClient, key: str, seed: int) -> None:
        self.house, self.books = house, Books()
        self._http, self._headers = http, {"Authorization": f"Bearer {key}"}
        self._random = np.random.default_rng(seed)

    async def sell(self, count: int, at_once: int = 6) -> Books:
        """Auction so many impressions."""
        # Drawn before, so that the order in which answers come changes nothing.
        rivals = [Decimal(str(round(float(r), 2))) for r in self._random.uniform(0.3, 6, count)]
        lucks = self._random.random((count, 4))
        room = asyncio.Semaphore(at_once)

        async def one(number: int) -> None:
            async with room:
                await self._auction(number, rivals[number], lucks[number])

        await asyncio.gather(*(one(number) for number in range(count)))
        return self.books

    def request(self, number: int) -> dict[str, Any]:
        """The bid request of one auction, with what a buyer must not keep."""
        house = self.house
        imp: dict[str, Any] = {
            "id": "1",
            "tagid": f"slot-{number % 3}",
            "banner": {"format": [{"w": 728, "h": 90}, {"w": 300, "h": 250}]},
            "bidfloor": float(house.floor),
            "bidfloorcur": house.currency,
        }
        if house.deal is not None:
            deal = {
                "id": house.deal,
                "at": house.at,
                "bidfloor": float(house.floor),
                "bidfloorcur": house.currency,
            }
            imp["pmp"] = {"private_auction": 1, "deals": [deal]}
        return {
            "id": f"{house.source}-{number}",
            "imp": [imp],
            "at": house.at,
            "tmax": 5000,
            "cur": [house.currency],
            "site": {"domain": "garden-news.example"},
            "device": {"devicetype": 1 + number % 2, "ip": "192.0.2.7"},
            "user": {"id": "an invented reader"},
        }

    async def _auction(self, number: int, rival: Decimal, luck: Any) -> None:
        self.books.auctions += 1
        request = self.request(number)
        headers = self._headers | {"x-openrtb-version": "2.6"}
        path = f"/openrtb/{self.house.source}/bids"
        answer = await self._http.post(path, json=request, headers=headers)
        if answer.status_code == 204:
            self.books.passes += 1
            return
        body = answer.json()
        self.books.faults += [*faults(body, request)]
        (bid,) = bids_of(body)
        # Some creatives are filtered before the auction: a loss that says nothing of price.
        if luck[3] < 0.1:
            await self._lost(bid, "202", None, luck)
            return
        price = Decimal(repr(bid["price"]))
        least = max(rival, self.house.floor)
        if price <= least:
            await self._lost(bid, "102", least, luck)
            return
        await self._won(bid, price, least, luck)

    async def _won(self, bid: dict[str, Any], price: Decimal, least: Decimal, luck: Any) -> None:
        clearing = price if self.house.at == 1 else min(price, least + INCREMENT)
        name = bid["id"]
        self.books.won[name] = self.cost(clearing)
        values = {"PRICE": f"{clearing}", "CURRENCY": self.house.currency, "MIN_TO_WIN": f"{least}"}
        # One win notice in four is lost on the way, and one bill in four; a few lose both.
        for place, url in enumerate((bid["nurl"], bid["burl"])):
            if luck[place] >= 0.25:
                await self._notify(url, values, repeats=luck[2] < 0.25)
                self.books.told[f"{('won', 'billed')[place]}:{name}"] += self.cost(clearing)

    async def _lost(
        self, bid: dict[str, Any], reason: str, least: Decimal | None, luck: Any
    ) -> None:
        self.books.losses[reason] += 1
        if luck[0] >= 0.125:
            values = {"LOSS": reason, "CURRENCY": self.house.currency}
            values |= {} if least is None else {"MIN_TO_WIN": f"{least}"}
            await self._notify(bid["lurl"], values, repeats=luck[2] < 0.25)

    async def _notify(self, url: str, values: dict[str, str], *, repeats: bool) -> None:
        """Call by GET, or now and then by POST; an impatient caller asks again at once."""
        address = substituted(url, values)
        for turn in range(3 if repeats else 1):
            call = self._http.post if turn == 1 else self._http.get
            self.books.calls[(await call(address)).status_code] += 1

    def cost(self, clearing: Decimal) -> int:
        """What the buyer owes for one impression at this CPM, in nanos, half to even."""
        nanos = clearing * self.house.rate * 10**6
        return int(nanos.to_integral_value(ROUND_HALF_EVEN))


def substituted(url: str, values: dict[str, str]) -> str:
    """Replace macros as plain text; what is not known becomes the empty text."""
    for name, value in values.items():
        url = url.replace(f"${{AUCTION_{name}}}", value)
    while "${AUCTION_" in url:
        begins = url.index("${AUCTION_")
        url = url[:begins] + url[url.index("}", begins) + 1 :]
    return url
