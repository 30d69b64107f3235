"""`thompson`: bid a value drawn from what the mean may be, afresh for every opportunity.

Thompson, "On the likelihood that one unknown probability exceeds another in view of the
evidence of two samples", Biometrika 25:285-294, 1933; analysed for arms by Agrawal, Goyal,
"Further Optimal Regret Bounds for Thompson Sampling", AISTATS 2013, PMLR 31. The draw is
scale x Beta, in nanos per impression, with values as shares of the scale (the ceiling). They
toss a coin for values between 0 and 1; here a value adds its share and no coin is tossed,
which is our own deviation. Their theorems are for arms: no theorem was found for an auction
that shows values only on wins. In simulated calm markets it lost least of all methods.
"""

from __future__ import annotations

import numpy as np
from numpy.random import Generator
from scipy import special

from service.decision import posterior
from service.decision.method import Counts, Method
from service.decision.terms import Terms
from service.learner.bounds import Numbers
from service.learner.tally import Tally


def draw(counts: Counts, terms: Terms, generator: Generator) -> Numbers:
    """One draw of the mean value, in nanos per impression, at most the ceiling."""
    return np.asarray(terms.scale * generator.beta(*posterior.beta(counts, terms)))


def quantile(counts: Counts, terms: Terms, order: float) -> Numbers:
    """The value below which a share of the draws lies, in nanos per impression."""
    first, second = posterior.beta(counts, terms)
    return np.asarray(terms.scale * special.betaincinv(first, second, order), dtype=np.float64)


def index(counts: Counts, terms: Terms) -> Numbers:
    """The median of the draws, in nanos per impression."""
    return quantile(counts, terms, 0.5)


def guarantee(tally: Tally, terms: Terms) -> str:
    """What is proved, in words."""
    return (
        "None for this auction: the theorems are for arms whose values are seen whenever they "
        "are tried." + posterior.prior_in_words(terms)
    )


METHOD = Method(
    name="thompson",
    index=index,
    source="Thompson, Biometrika 1933; Agrawal, Goyal, Further Optimal Regret Bounds for "
    "Thompson Sampling, AISTATS 2013.",
    assumes="Second price; values between 0 and the ceiling, independent and from one "
    "unchanging distribution; competing bids independent of them.",
    guarantee=guarantee,
    takes_prior=True,
    published_bound=True,
    draw=draw,
    quantile=quantile,
)
