"""One impression opportunity as the caller described it, apart from HTTP."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import NamedTuple

from service.learner.hashing import Hashed

Feature = str | float | bool


NONE_SAID: Mapping[str, Feature] = MappingProxyType({})


class Opportunity(NamedTuple):
    """
    What is asked: name a price for this impression.

    Args:
        line_item: Who would buy it; the first of `line_items` where several compete.
        request_id: The caller's own name for it, echoed only.
        source: Where it is sold.
        floor: Least price the seller takes, in nanos per impression.
        features: What is known of it.
        value_hint: The caller's own prediction of its value in nanos.
        deadline_ms: How long the caller waits, counted from arrival.
        test: Answered and signed, but without a hold or a lesson.
        auction: Kind of auction; None for the line item's.
        price: What a fixed-price sale asks, in nanos per impression.
        line_items: Those that compete for it, if several may.
        currencies: In which the price may be named, the dearest wish first; empty where it is
            the line item's own. Floor and price are then in `floor_currency`.
        multiplier: Impressions that the sale is expected to bring, in parts of 10^9.
        hashed: The features under the key of the database, where the line item reads them.
    """

    line_item: str
    request_id: str | None = None
    source: str = "default"
    floor: int = 0
    features: Mapping[str, Feature] = NONE_SAID
    value_hint: int | None = None
    deadline_ms: int | None = None
    test: bool = False
    auction: str | None = None
    price: int | None = None
    line_items: tuple[str, ...] = ()
    currencies: tuple[str, ...] = ()
    floor_currency: str = ""
    multiplier: int = 10**9
    hashed: Hashed = ()

    def seen_as(self, hashed: Hashed) -> Opportunity:
        """The same with its features hashed."""
        # By place, which takes a third of the time of a replacement by name.
        return Opportunity(*self[:-1], hashed)
