"""From a value to a bid, one rule per kind of auction, apart from how the value was found."""

from __future__ import annotations

from collections.abc import Callable

from service.learner.bounds import Numbers


def second_price(value_nanos: Numbers) -> Numbers:
    """
    Bid the value: what is bid decides only whether it is won, never what is paid.

    Vickrey, "Counterspeculation, auctions, and competitive sealed tenders", The Journal of
    Finance 16(1):8-37, 1961.
    """
    return value_nanos


RULES: dict[str, Callable[[Numbers], Numbers]] = {"second": second_price}
