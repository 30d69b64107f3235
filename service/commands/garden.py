"""The invented advertiser of the demo, apart so that its market is drawn without a server.

Firnholz Alpine Garden sells day tickets, season passes and plants. Neither it nor its numbers
exist. Everything is drawn from one seed: per line item the highest competing bid is lognormal
and independent of the value, as the learning methods assume.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service import money
from service.commands.exchange import Auction

CURRENCY = "EUR"
RIVAL_MEDIAN_CPM = 3.0
RIVAL_SIGMA = 0.8

Amounts = Callable[[np.random.Generator, int], NDArray[np.float64]]


@dataclass(frozen=True, slots=True)
class Planned:
    """
    A line item together with the truth about its impressions, which the service never sees.

    Attributes:
        body: As `POST /v1/line-items` takes it.
        share: Share of the demo's auctions.
        chance: Probability that an impression brings something.
        amounts: Draws what it brings, in the currency.
        mean: What an impression is worth on average, in the currency.
    """

    body: dict[str, object]
    share: float
    chance: float
    amounts: Amounts
    mean: float

    @property
    def id(self) -> str:
        """The line item's id."""
        return str(self.body["id"])

    @property
    def method(self) -> str:
        """The published name of the method that prices it."""
        policy = self.body["policy"]
        return str(policy["method"]) if isinstance(policy, dict) else ""

    @property
    def zero_is_news(self) -> bool:
        """Whether the advertiser also reports that an impression brought nothing."""
        value = self.body["value"]
        return isinstance(value, dict) and value["arrival"] == "once"


def line_items() -> list[Planned]:
    """The three line items: two with frequent values, one with one value in a thousand."""
    return [_film(), _day_ticket(), _season_pass()]


def _film() -> Planned:
    value = {"ceiling": "0.01", "typical": "0.01", "arrival": "once"}
    body = _body("garden-film", "Full views of the garden film", "20.00", value, "kl-ucbid")
    return Planned(body, 0.25, 0.3, lambda generator, count: np.full(count, 0.01), 0.003)


def _day_ticket() -> Planned:
    value = {"ceiling": "0.008", "typical": "0.005", "arrival": "once"}
    body = _body("day-ticket", "Day-ticket enquiries, by length", "4.00", value, "ucbid")
    return Planned(
        body, 0.25, 0.5, lambda generator, count: generator.uniform(0.002, 0.008, count), 0.0025
    )


def _season_pass() -> Planned:
    # Its window is two seconds, or nearly all of it would be open when the table is made.
    value = {"ceiling": "50.00", "typical": "2.00", "arrival": "accrues", "window_s": 2}
    body = _body("season-pass", "Season passes", "40.00", value, "posterior-quantile")
    return Planned(
        body, 0.5, 0.001, lambda generator, count: generator.exponential(2.0, count), 0.002
    )


def _body(
    name: str, title: str, budget: str, value: Mapping[str, object], method: str
) -> dict[str, object]:
    return {
        "id": name,
        "name": f"{title}, Firnholz Alpine Garden",
        "currency": CURRENCY,
        "budget": budget,
        "bid_cap_cpm": 8,
        "value": dict(value),
        "policy": {"method": method},
    }


def market(planned: list[Planned], count: int, seed: int) -> list[Auction]:
    """
    Draw the demo's auctions, the line items mixed in a random order.

    Args:
        count: How many auctions in all.
        seed: The same seed gives the same auctions.
    """
    # Each has a stream of its own, so that its draws do not hang on the others' number.
    order, *streams = np.random.default_rng(seed).spawn(len(planned) + 1)
    drawn: list[Auction] = []
    for number, (item, stream) in enumerate(zip(planned, streams, strict=True)):
        # The last one takes what the rounding of the others leaves.
        last = number == len(planned) - 1
        size = count - len(drawn) if last else round(item.share * count)
        drawn += _auctions(item, stream, size, len(drawn))
    return [drawn[place] for place in order.permutation(len(drawn))]


def _auctions(
    item: Planned, generator: np.random.Generator, count: int, first: int
) -> list[Auction]:
    rivals = RIVAL_MEDIAN_CPM * np.exp(RIVAL_SIGMA * generator.standard_normal(count))
    hits = generator.random(count) < item.chance
    amounts = np.where(hits, item.amounts(generator, count), 0.0)
    in_nanos = np.rint(amounts * money.NANOS_PER_UNIT).astype(np.int64).tolist()
    prices = np.rint(rivals * money.NANOS_PER_CPM).astype(np.int64).tolist()
    return [
        Auction(item.id, first + place, rival, value if value or item.zero_is_news else None)
        for place, (rival, value) in enumerate(zip(prices, in_nanos, strict=True))
    ]
