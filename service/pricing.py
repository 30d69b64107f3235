"""From a snapshot to a price that may leave: the pure middle of a bid, with no clock and no money.

Apart from the story of bidding, so that a rehearsal goes the very same way as production.
"""

from __future__ import annotations

from typing import NamedTuple

from numpy.random import Generator

from service.currencies import leaving
from service.decision.opportunity import Opportunity
from service.decision.price import Passed, Ready
from service.decision.rule import FIXED, Sale, sale_of
from service.guard.fees import NONE, Fees
from service.guard.gate import Cleared, Limits, clear
from service.guard.scale import PLAIN, Scale


class Put(NamedTuple):
    """
    What is for sale, in the line item's own currency, and how a price leaves.

    Args:
        opportunity: Its prices net of fees, in the line item's currency.
        asked: As the caller described it.
        scale: How a price becomes one that leaves.
    """

    opportunity: Opportunity
    asked: Opportunity
    scale: Scale = PLAIN


class Priced(NamedTuple):
    """
    A price that may leave; money in nanos, gross.

    Args:
        sale: What is for sale.
        cleared: The price and what set it.
        worth: What the impression is valued at.
        proposed: The price before the guard.
        sent: What is answered, net and in the currency that was asked for.
    """

    sale: Sale
    cleared: Cleared
    worth: int
    proposed: int
    sent: int


class Unpriced(NamedTuple):
    """
    No price may leave.

    Args:
        reason: Of the pass.
        sale: What was for sale.
        cut: Whether the guard, and not the rule, says so.
    """

    reason: str
    sale: Sale
    cut: bool = False


def priced(
    rule: Ready,
    limits: Limits,
    put: Put,
    free: int,
    generator: Generator,
    set_by: str | None = None,
) -> Priced | Unpriced:
    """
    Price one opportunity and let the guard look at it.

    Args:
        rule: What is learnt, made ready.
        limits: What binds every price of the line item.
        put: What is for sale.
        free: Money in hand, in nanos.
        generator: The only source of chance.
        set_by: What is said to have set the price, if not what the rule says.
    """
    fees, (opportunity, asked, scale) = limits.fees, put
    offered = gross(opportunity, fees)
    sale = sale_of(offered, rule.terms.auction)
    proposed = rule.propose(offered, generator, sale)
    if isinstance(proposed, Passed):
        return Unpriced(proposed.reason, sale)
    said = proposed.set_by if set_by is None else set_by
    cleared = clear(proposed.price, said, limits, sale.floor, free)
    if isinstance(cleared, str):
        return Unpriced(cleared, sale, cut=True)
    # Shaded prices are below what the impression is worth; comparisons need the latter.
    worth = proposed.price if proposed.value is None else proposed.value
    if scale is PLAIN and fees is NONE:
        return Priced(sale, cleared, worth, proposed.price, cleared.price)
    sent = leaving(scale, fees.net(cleared.price), asked, fixed=sale.auction == FIXED)
    # A nano here may be less than the least price of another currency.
    if sent <= 0:
        return Unpriced("price_rounds_to_zero", sale)
    # Between two currencies a bid at the floor may round to just below it.
    if scale.worth(sent) < opportunity.floor:
        return Unpriced("under_floor", sale)
    # Held is what leaves, turned back: rounding has made it a little less than was cleared.
    held = Cleared(fees.gross(scale.held(sent)), cleared.set_by)
    return Priced(sale, held, worth, proposed.price, sent)


def gross(opportunity: Opportunity, fees: Fees) -> Opportunity:
    """What is for sale, at what it costs."""
    if fees is NONE:
        return opportunity
    floor = fees.gross(opportunity.floor) if opportunity.floor else 0
    price = None if opportunity.price is None else fees.gross(opportunity.price)
    return opportunity._replace(floor=floor, price=price)
