"""`posterior-quantile`: a quantile of what the value may be, for values seen once in a thousand.

Conversions per impression ~ Gamma(k0 + K, k0 typical / expected + N), times the mean
amount (k0 typical + sum of values) / (k0 + K); the bid is the quantile of `order` of
their product, in nanos per impression. K conversions among N known wins; k0 conversions
of prior. Assumes conversions come like a Poisson count and the mean amount is known well
enough; the spread of amounts is not in the quantile. This is our own setting, with no
regret theorem; with order 1 - 1/t it is Bayes-UCB on a Gamma posterior (Kaufmann, Cappé,
Garivier, "On Bayesian Upper Confidence Bounds for Bandit Problems", AISTATS 2012).
"""

from __future__ import annotations

import numpy as np

from service.decision.method import Counts, Method, Setting
from service.decision.terms import Terms
from service.learner import bounds
from service.learner.bounds import Numbers
from service.learner.tally import Tally

ORDER = 0.75


def index(counts: Counts, terms: Terms) -> Numbers:
    """The posterior's quantile, in nanos per impression."""
    conversions = terms.prior_conversions + counts.converted
    impressions = terms.prior_impressions + counts.known
    amount = (terms.prior_conversions * terms.typical + counts.amount) / conversions
    rate = bounds.gamma_quantile(conversions, impressions, terms.settings["order"])
    return np.asarray(rate * amount, dtype=np.float64)


def guarantee(tally: Tally, terms: Terms) -> str:
    """What is proved, in words."""
    return (
        "None: our own setting, no regret theorem; with order 1 - 1/t it is Bayes-UCB on a "
        "Gamma posterior."
    )


METHOD = Method(
    name="posterior-quantile",
    index=index,
    source="Our own setting; compare Kaufmann, Cappé, Garivier, On Bayesian Upper Confidence "
    "Bounds for Bandit Problems, AISTATS 2012.",
    assumes="Second price; conversions come like a Poisson count at one unchanging rate; "
    "amounts do not depend on it.",
    guarantee=guarantee,
    settings={"order": Setting(default=ORDER, low=0.0, high=1.0)},
    takes_prior=True,
    needs_prior=True,
)
