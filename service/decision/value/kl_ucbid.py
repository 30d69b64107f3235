"""`kl-ucbid`: as `ucbid`, with the tighter Bernoulli divergence in place of the root.

Achddou, Cappé, Garivier, "Efficient Algorithms for Stochastic Repeated Second-price
Auctions", ALT 2021, PMLR 132 (klUCBid): scale x the root x >= mean of
kl(mean, x) = gamma ln t / N, in nanos per impression, with values as shares of the scale
(the ceiling), t the round and N the known wins. Assumes second price, values in
[0, scale] that are independent and alike, and competing bids independent of them.
Guarantee: for gamma > 1, regret O(sqrt(T ln T)) in the worst case and O(ln^2 T) where the
competing bid has a density bounded above and below; asymptotic, so no figure can be
shown, and for outcomes known before the next bid.
"""

from __future__ import annotations

import numpy as np

from service.decision.method import Counts, Method, Setting
from service.decision.terms import Terms
from service.learner import bounds
from service.learner.bounds import Numbers
from service.learner.tally import Tally

GAMMA = 1.01


def index(counts: Counts, terms: Terms) -> Numbers:
    """The optimistic mean, in nanos per impression, at most the ceiling."""
    share = bounds.kl_ucbid_index(
        counts.mean_share(terms), counts.round_next, counts.known, terms.settings["gamma"]
    )
    return np.asarray(terms.scale * share, dtype=np.float64)


def guarantee(tally: Tally, terms: Terms) -> str:
    """What is proved, in words."""
    if terms.settings["gamma"] <= 1.0:
        return "None: the theorem needs gamma above 1."
    return (
        "Loss grows like sqrt(T ln T) at worst, and like ln(T) squared where competing bids "
        "have a bounded density; asymptotic, so no amount can be named, and for outcomes "
        "known at once."
    )


METHOD = Method(
    name="kl-ucbid",
    index=index,
    source="Achddou, Cappé, Garivier, Efficient Algorithms for Stochastic Repeated "
    "Second-price Auctions, ALT 2021.",
    assumes="Second price; values between 0 and the ceiling, independent and from one "
    "unchanging distribution; competing bids independent of them.",
    guarantee=guarantee,
    settings={"gamma": Setting(default=GAMMA, low=0.0, high=100.0)},
    published_bound=True,
)
