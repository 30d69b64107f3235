"""`linear`: a value that is linear in hashed features, bid at the top of its ellipsoid.

Abbasi-Yadkori, Pál, Szepesvári, "Improved algorithms for linear stochastic bandits", NeurIPS
2011, Theorem 2: mean + radius x width, values in ceilings, so the noise is 1/2-sub-Gaussian;
penalty 1, chance 0.05 to be outside, weights assumed no longer than 1 ceiling. It learns from
wins alone. Analysed with a budget, and bids on a win of this kind, by Flajolet, Jaillet,
"Real-time bidding with side information", NeurIPS 2017 (from memory). Values that come late
are in neither: while windows are open, all impressions count by the share of their values that
had time to come, the same for all.
"""

from __future__ import annotations

import numpy as np

from service import money
from service.decision.method import Counts, Method, Setting
from service.decision.terms import Terms
from service.learner import linear
from service.learner.bounds import Numbers
from service.learner.hashing import SIZES
from service.learner.tally import Tally

NOISE = 0.5  # Half the range of a value in ceilings.
LENGTH = 1.0
PENALTY = 1.0
DELTA = 0.05
SQUARE = 8.0  # An impression with seven categories, and the constant that each has.


def index(counts: Counts, terms: Terms) -> Numbers:
    """The same rule where nothing is known of an impression: its vector is the constant alone."""
    grown = PENALTY + counts.known
    radius = linear.ellipsoid_radius(np.log(grown / PENALTY), PENALTY, NOISE, LENGTH, DELTA)
    share = counts.amount / terms.scale / grown + radius / np.sqrt(grown)
    return np.asarray(share * terms.scale, dtype=np.float64)


def guarantee(tally: Tally, terms: Terms) -> str:
    """
    What is lost by bidding too much, at most, with its numbers.

    A win costs at most twice radius times width more than its value, and widths up to 1 add up
    to no more than sqrt(2 n ln det V), the elliptical potential (lemma 11 of the same paper).
    """
    wins, dimensions = max(tally.wins, 1), int(terms.settings["dimensions"])
    radius = linear.plain_radius(wins, dimensions, PENALTY, NOISE, LENGTH, DELTA, SQUARE)
    widths = np.sqrt(2.0 * wins * dimensions * np.log1p(wins * SQUARE / dimensions))
    bound, spent = (
        f"{money.nanos_text(nanos)} {terms.currency}"
        for nanos in (round(float(2.0 * radius * widths) * terms.ceiling), tally.paid)
    )
    known = "With features of at most seven categories and values known at once"
    if round(float(2.0 * radius * widths) * terms.ceiling) > tally.paid:
        return (
            f"{known}, Theorem 2 of Abbasi-Yadkori, Pál and Szepesvári says nothing yet: its "
            f"bound over {tally.wins:,} wins is {bound}, more than the {spent} spent so far."
        )
    return (
        f"{known}, by Theorem 2 of Abbasi-Yadkori, Pál and Szepesvári: with chance 0.95 at most "
        f"{bound} lost against bidding the true linear value over {tally.wins:,} wins."
    )


METHOD = Method(
    name="linear",
    index=index,
    source="Abbasi-Yadkori, Pál, Szepesvári, Improved algorithms for linear stochastic bandits, "
    "NeurIPS 2011, Theorem 2, on features hashed after Weinberger et al., ICML 2009.",
    assumes="Second price; the mean value of an impression is linear in its hashed features, "
    "with weights no longer than one ceiling, and does not change; every value is known before "
    "the next bid. Here values come late: while windows are open, all impressions count by one "
    "share, that of the values that had time to come.",
    guarantee=guarantee,
    settings={"dimensions": Setting(default=32, low=16, high=64, choices=SIZES)},
    published_bound=True,
    by_features=True,
)
