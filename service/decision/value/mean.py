"""`mean`: bid the mean value known so far; a baseline, and with no prior a bad one.

(k0 typical + sum of values) / (k0 typical / expected + N) in nanos per impression, with k0
conversions of prior and N known wins. With k0 = 0 it is the plain mean, and the guess is
bid until the first value is known. Source: the follow-the-leader baseline of Weed,
Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016, and of every bandit
textbook. Guarantee: none. With k0 = 0, values of 0 or 1 with mean v and competing bids
uniform on [0, 1], the first value is 0 with probability 1 - v and then it never wins
again, so it loses at least (1 - v) v^2 / 2 per round.
"""

from __future__ import annotations

from service.decision import posterior
from service.decision.method import Method
from service.decision.terms import Terms
from service.learner.tally import Tally


def guarantee(tally: Tally, terms: Terms) -> str:
    """What is proved, in words."""
    return "None: a mean that starts too low may never win, and never learn, again."


METHOD = Method(
    name="mean",
    index=posterior.mean,
    source="Baseline; compare Weed, Perchet, Rigollet, COLT 2016.",
    assumes="Values of wins come from one unchanging distribution.",
    guarantee=guarantee,
    takes_prior=True,
)
