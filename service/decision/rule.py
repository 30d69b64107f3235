"""From a value to a bid, one rule per kind of auction, apart from how the value was found."""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

from service.decision.market import Market
from service.decision.opportunity import Opportunity
from service.learner.bounds import Numbers

SECOND, FIRST, FIXED = "second", "first", "fixed"


class Sale(NamedTuple):
    """
    What the rule needs of an opportunity; money in nanos per impression.

    Args:
        auction: Its kind.
        source: Where it is sold.
        floor: The least that may win; the price itself where it is fixed.
    """

    auction: str
    source: str
    floor: int


def sale_of(opportunity: Opportunity, auction: str) -> Sale:
    """
    The sale an opportunity stands for.

    Args:
        auction: The line item's kind of auction, for an opportunity that names none.
    """
    kind = opportunity.auction or auction
    price = (opportunity.price or 0) if kind == FIXED else 0
    return Sale(kind, opportunity.source, max(opportunity.floor, price))


def second_price(value_nanos: Numbers) -> Numbers:
    """
    Bid the value: what is bid decides only whether it is won, never what is paid.

    Vickrey, "Counterspeculation, auctions, and competitive sealed tenders", The Journal of
    Finance 16(1):8-37, 1961.
    """
    return value_nanos


def first_price(value: int, sale: Sale, cap: int, market: Market) -> int:
    """
    Shade: the bid that earns most by what is known of the source, hopeful where nothing is.

    Optimism in both the value and the chance to win has no published bound together.
    """
    return market.first_price(float(value), sale.source, sale.floor, cap)


def fixed_price(value: int, sale: Sale, cap: int, market: Market) -> int:
    """Take it where the value reaches the price; else the value stays under it, as a floor."""
    return sale.floor if min(value, cap) >= sale.floor > 0 else value


def as_is(value: int, sale: Sale, cap: int, market: Market) -> int:
    """The value itself."""
    return value


# Elementwise, for rehearsals; the others need to know the sale.
RULES: dict[str, Callable[[Numbers], Numbers]] = {SECOND: second_price}
OF_SALE: dict[str, Callable[[int, Sale, int, Market], int]] = {
    SECOND: as_is,
    FIRST: first_price,
    FIXED: fixed_price,
}
