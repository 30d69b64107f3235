"""Which rule bids for an opportunity, and with what chances; apart because hindsight needs both.

Where a share of traffic is kept on a plain rule, a keyed hash of the request's name chooses. What
was drawn, an arm or a price, is logged with its chance, for nobody can work it out later.
"""

from __future__ import annotations

import secrets
from typing import NamedTuple

from service.catalog import Item, PlainRule
from service.decision.opportunity import Opportunity
from service.decision.price import Ready
from service.guard.control import CONTROL, MAIN
from service.guard.hand import Hand


class Draw(NamedTuple):
    """
    How it came that this rule bid, and this price.

    Args:
        arm: Which rule of a control share.
        arm_odds: The chance that it was this one; None without a control share.
        odds: The chance of just this price, or of one under the floor; None where none is drawn
            from a law.
    """

    arm: str = MAIN
    arm_odds: float | None = None
    odds: float | None = None


NOTHING = Draw()


def drawn(
    item: Item, opportunity: Opportunity, hand: Hand, key: bytes
) -> tuple[PlainRule | None, Draw]:
    """
    The plain rule if it bids, and the chance that it was so.

    Args:
        item: The line item.
        opportunity: What is for sale.
        hand: Whether the arm has money in it.
        key: Secret of the database, which the choice is hashed with.
    """
    plain = item.plain
    if plain is None:
        return None, NOTHING
    room = opportunity.test or (plain.open and hand.has_room(item.id, plain.control))
    if not room:
        # Nobody loses an opportunity because the arm has no money: the method bids.
        return None, Draw(arm_odds=1.0)
    # A request without a name is a unit of its own.
    unit = opportunity.request_id or secrets.token_hex(16)
    if plain.control.chooses(item.id, unit, key):
        return plain, Draw(CONTROL, plain.control.fraction)
    return None, Draw(MAIN, 1.0 - plain.control.fraction)


def odds_of(rule: Ready, price: int) -> float | None:
    """The chance that just this price was drawn; None where prices are not drawn from a law."""
    return None if rule.law is None else rule.law.chance_of(price)


def odds_below(rule: Ready, floor: int) -> float | None:
    """The chance that a price under the floor was drawn."""
    return None if rule.law is None else 1.0 - rule.law.chance_above(floor - 1)
