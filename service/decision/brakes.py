"""What may hold a bid back although its price is good, apart from how the price was made."""

from __future__ import annotations

from service.decision import posterior
from service.decision.counts import Counts
from service.decision.terms import Terms
from service.learner.rules import ONCE
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
    # A restart forgets values, which says nothing of the feed; the reports it had still count.
    told = max(tally.known, tally.values_seen)
    return tally.wins - told > max(WAITING_MIN, WAITING_PER_KNOWN * told)


def learning_cost(tally: Tally, counts: Counts, terms: Terms) -> float:
    """
    What was paid less what it is worth at the posterior mean, in nanos; below 0 is a gain.

    An estimate: the impressions bought are all valued at what is believed of one now.
    """
    return tally.paid - tally.wins * float(posterior.mean(counts, terms))


def allowance_bid(tally: Tally, counts: Counts, terms: Terms) -> float | None:
    """
    The most that may be bid once learning has cost more than its allowance, else None.

    That is the posterior mean: nothing is then paid for the sake of knowing more. A brake
    without a theorem; while it holds, no published guarantee of the method does. It lets go
    by itself when the bids at the mean have earned the loss back.
    """
    if terms.allowance is None or learning_cost(tally, counts, terms) <= terms.allowance:
        return None
    return float(posterior.mean(counts, terms))
