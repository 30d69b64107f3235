"""Regret of a method where it can be worked out exactly: competing bids uniform on the scale.

For them a bid b loses (b - v)^2 / 2 scales a round in expectation against the best fixed
bid, which is the mean value v itself: the integral from v to b of (m - v) dm (Achddou,
Cappé, Garivier, "Efficient Algorithms for Stochastic Repeated Second-price Auctions", ALT
2021, appendix A.1). Adding that up, in place of what was realised, takes the luck of the
competing bids out of the figure.
"""

from __future__ import annotations

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.decision.counts import Counts, nothing
from service.decision.learnability import defaults
from service.decision.methods import METHODS
from service.decision.terms import Terms

SCALE = 10**9


def uniform_terms(method: str, prior: float = 0.0, **settings: float) -> Terms:
    """Terms whose cap, ceiling and scale are one, with no prior to lean on unless it is given."""
    guess = SCALE // 2 if prior else SCALE
    config = {
        "currency": "EUR",
        "spend_on": "won",
        "losses": "priced",
        "bid_cap": SCALE,
        "auction": "second",
        "value": {
            "ceiling": SCALE,
            "arrival": "once",
            "typical": SCALE,
            "expected": {"per_impression": guess, "conversions": prior},
        },
        "policy": {"method": method, **settings},
    }
    return Terms.from_config(defaults(config)[0])


def uniform_regret(
    terms: Terms, chance: float, rounds: int, runs: int, rng: Generator
) -> NDArray[np.float64]:
    """
    Regret of each of many runs in scales, with values of one scale or nothing.

    Args:
        terms: From `uniform_terms`.
        chance: Chance that a value is one, and so the mean value.
        rounds: Rounds played, each with its outcome known before the next.
        runs: Independent runs.
        rng: The only source of chance.
    """
    counts, regret = nothing(runs), np.zeros(runs)
    method = METHODS[terms.method]
    for _ in range(rounds):
        value = method.index(counts, terms)
        if method.draw is not None:
            value = method.draw(counts, terms, rng)
        bid = np.minimum(value / SCALE, 1.0)
        # What the bid loses on average, whatever bid competed with it.
        regret += (bid - chance) ** 2 / 2.0
        won = rng.random(runs) <= bid
        counts = _after(counts, won, won & (rng.random(runs) < chance))
    return regret


def _after(counts: Counts, won: NDArray[np.bool_], converted: NDArray[np.bool_]) -> Counts:
    return Counts(
        counts.rounds + 1.0,
        counts.known + won,
        counts.converted + converted,
        counts.amount + SCALE * converted,
        counts.amount_square + float(SCALE) * SCALE * converted,
    )
