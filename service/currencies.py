"""An opportunity in another currency, put into the line item's own before anybody prices it."""

from __future__ import annotations

from service.decision.opportunity import Opportunity
from service.guard.scale import PLAIN, WHOLE, Rates, Scale


def inside(
    opportunity: Opportunity, own: str, rates: Rates, wall_ms: int
) -> tuple[Opportunity, Scale] | None:
    """
    What is for sale in the line item's own currency, and how its price leaves.

    Args:
        own: The currency of the line item.

    Returns:
        None where no rate says what a price or the floor is worth.
    """
    if not opportunity.currencies:
        return opportunity, PLAIN
    # Without a floor or a price nothing is asked of its currency, so no rate may be missing.
    floored = opportunity.floor > 0 or opportunity.price is not None
    floor_rate = rates.at(opportunity.floor_currency or own, own, wall_ms) if floored else WHOLE
    # Its own currency needs no rate, so no rate can be wrong.
    wishes = (own,) if own in opportunity.currencies else opportunity.currencies
    known = ((currency, rates.at(currency, own, wall_ms)) for currency in wishes)
    currency, rate = next(((c, r) for c, r in known if r is not None), ("", None))
    if rate is None or floor_rate is None:
        return None
    # The floor may be in another currency than the bid: each has its own rate.
    asked = Scale(opportunity.floor_currency or own, floor_rate, opportunity.multiplier)
    price = None if opportunity.price is None else asked.worth(opportunity.price)
    put = opportunity._replace(floor=asked.worth(opportunity.floor), price=price)
    return put, Scale(currency, rate, opportunity.multiplier)


def leaving(scale: Scale, net: int, opportunity: Opportunity, *, fixed: bool) -> int:
    """
    The price that leaves for at most `net` nanos, or 0 where rounding leaves none.

    Args:
        opportunity: As it came, in its own currency.
    """
    sent = scale.sent(net)
    same = scale.currency in ("", opportunity.floor_currency)
    if fixed and same and opportunity.price is not None and scale is not PLAIN:
        # By two roundings it may have grown beyond the price that is asked.
        return min(sent, opportunity.price)
    return sent
