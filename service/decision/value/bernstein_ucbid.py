"""`bernstein-ucbid`: the mean plus a bonus that shrinks where values hardly differ.

Achddou, Cappé, Garivier, "Efficient Algorithms for Stochastic Repeated Second-price
Auctions", ALT 2021, PMLR 132 (Bernstein-UCBid): scale x min{1, mean + sqrt(2 W L / N) +
3 L / N} in nanos per impression, L = ln(3 t^gamma), W the variance of the N known values,
values as shares of the scale (the ceiling). Assumes second price, values in [0, scale] that
are independent and alike, and competing bids independent of them. Guarantee: for gamma > 2,
regret at most (beta / F(v)) 8 W gamma ln^2 T plus terms of order ln T, where the density of
competing bids is at most beta and F(v) is the share of auctions the value itself would win;
neither is known here, so no amount can be named. Pays off only after thousands of wins.
"""

from __future__ import annotations

import numpy as np

from service.decision.method import Counts, Method, Setting
from service.decision.terms import Terms
from service.learner import optimism
from service.learner.bounds import Numbers
from service.learner.tally import Tally

GAMMA = 2.01


def index(counts: Counts, terms: Terms) -> Numbers:
    """The optimistic mean, in nanos per impression, at most the ceiling."""
    share = optimism.bernstein_ucbid_index(
        counts.mean_share(terms),
        counts.variance_share(terms),
        counts.round_next,
        counts.known,
        terms.settings["gamma"],
    )
    return np.asarray(terms.scale * share, dtype=np.float64)


def guarantee(tally: Tally, terms: Terms) -> str:
    """What is proved, in words."""
    if terms.settings["gamma"] <= 2.0:
        return "None: the theorem needs gamma above 2."
    return (
        "Loss grows like ln(T) squared, in proportion to the variance of the values, where "
        "competing bids have a bounded density; its constants depend on the market, so no "
        "amount can be named, and it is for outcomes known at once."
    )


METHOD = Method(
    name="bernstein-ucbid",
    index=index,
    source="Achddou, Cappé, Garivier, Efficient Algorithms for Stochastic Repeated "
    "Second-price Auctions, ALT 2021.",
    assumes="Second price; values between 0 and the ceiling, independent and from one "
    "unchanging distribution; competing bids independent of them; thousands of wins.",
    guarantee=guarantee,
    settings={"gamma": Setting(default=GAMMA, low=0.0, high=100.0)},
    published_bound=True,
)
