"""`bayes-ucb`: the quantile of what the mean may be, of an order that rises with the rounds.

Kaufmann, Cappé, Garivier, "On Bayesian Upper Confidence Bounds for Bandit Problems",
AISTATS 2012, PMLR 22: scale x the quantile of order 1 - 1 / t of a Beta posterior, in nanos
per impression, with values as shares of the scale (the ceiling) and t the round. Their
theorem has 1 - 1 / (t ln(n)^c) with c >= 5; their advice, taken here, is c = 0. It is for
arms of 0 or 1, known at once: no theorem was found for an auction that shows values only on
wins. Values between 0 and 1 add their share to the posterior, which is our own reading.
"""

from __future__ import annotations

import numpy as np

from service.decision import posterior
from service.decision.method import Counts, Method
from service.decision.terms import Terms
from service.learner import optimism
from service.learner.bounds import Numbers
from service.learner.tally import Tally


def index(counts: Counts, terms: Terms) -> Numbers:
    """The posterior's quantile, in nanos per impression, at most the ceiling."""
    first, second = posterior.beta(counts, terms)
    # In round 1 an order of nothing would bid nothing, and then nothing would ever be learnt.
    rounds = np.maximum(counts.round_next, 2.0)
    share = optimism.bayes_ucb_beta(first, second, rounds, rounds, prior=(0.0, 0.0))
    return np.asarray(terms.scale * share, dtype=np.float64)


def guarantee(tally: Tally, terms: Terms) -> str:
    """What is proved, in words."""
    return (
        "None for this auction: the theorem is for arms of value 0 or 1 that are seen whenever "
        "they are tried." + posterior.prior_in_words(terms)
    )


METHOD = Method(
    name="bayes-ucb",
    index=index,
    source="Kaufmann, Cappé, Garivier, On Bayesian Upper Confidence Bounds for Bandit "
    "Problems, AISTATS 2012.",
    assumes="Second price; values between 0 and the ceiling, independent and from one "
    "unchanging distribution; competing bids independent of them.",
    guarantee=guarantee,
    takes_prior=True,
    published_bound=True,
)
