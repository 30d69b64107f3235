"""`ucbid`: the mean plus a bonus for what is not known yet, as published.

Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016, PMLR 49,
Algorithm 1: scale x min{mean + sqrt(gamma ln t / (2N)), 1} in nanos per impression, with
values as shares of the scale (the ceiling), t the round and N the known wins. gamma is 3
there. Assumes second price and values in [0, scale], independent of each other and of
the competing bid. Guarantee: Theorem 1, regret at most 3 + 2 sqrt(6 T ln T) scales
against the best fixed bid, whatever the competing bids do; stated for gamma = 3 and for
outcomes known before the next bid. Later outcomes cost more, and no figure says how much.
"""

from __future__ import annotations

import numpy as np

from service.decision.method import Counts, Method, Setting
from service.decision.saying import bound_in_words
from service.decision.terms import Terms
from service.learner import bounds
from service.learner.bounds import Numbers
from service.learner.tally import Tally

GAMMA = 3.0


def index(counts: Counts, terms: Terms) -> Numbers:
    """The optimistic mean, in nanos per impression, at most the ceiling."""
    share = bounds.ucbid_index(
        counts.mean_share(terms), counts.round_next, counts.known, terms.settings["gamma"]
    )
    return np.asarray(terms.scale * share, dtype=np.float64)


def guarantee(tally: Tally, terms: Terms) -> str:
    """Theorem 1 in money, or the plain statement that it says nothing yet."""
    if terms.settings["gamma"] != GAMMA:
        return "Theorem 1 is stated for gamma = 3; for this gamma only the order is known."
    lost = round(terms.scale * float(bounds.ucbid_regret_bound(max(tally.rounds, 1))))
    return f"{bound_in_words('Theorem 1', lost, tally, terms)} It is for outcomes known at once."


METHOD = Method(
    name="ucbid",
    index=index,
    source="Weed, Perchet, Rigollet, Online learning in repeated auctions, COLT 2016.",
    assumes="Second price; values between 0 and the ceiling, independent of each other and "
    "of the competing bid.",
    guarantee=guarantee,
    settings={"gamma": Setting(default=GAMMA, low=0.0, high=100.0)},
    published_bound=True,
)
