"""What may hold a bid back although its price is good, apart from how the price was made."""

from __future__ import annotations

from service.decision.terms import Terms
from service.learner.fold import ONCE
from service.learner.tally import Tally

WAITING_MIN = 50
WAITING_PER_KNOWN = 2


def no_value(tally: Tally, terms: Terms) -> bool:
    """
    Whether too many wins still await their first word on value to go on buying.

    Only where each win gets one value: more than max(50, 2 x values known) wins without a
    value look like a feed that is silent. A brake without a theorem.
    """
    if terms.arrival != ONCE:
        return False
    waiting = tally.wins - tally.known
    return waiting > max(WAITING_MIN, WAITING_PER_KNOWN * tally.known)
