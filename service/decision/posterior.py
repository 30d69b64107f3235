"""What the guess and the known values say together, shared by methods and brakes."""

from __future__ import annotations

import numpy as np

from service.decision.counts import Counts
from service.decision.terms import Terms
from service.learner.arrays import Numbers, double

# A posterior needs both of its numbers above 0, also where a guess sits at the ceiling.
LEAST = 1e-6


def mean(counts: Counts, terms: Terms) -> Numbers:
    """
    (k0 typical + sum of values) / (k0 typical / expected + N), in nanos per impression.

    With k0 = 0 conversions of prior it is the plain mean, and the guess until one value is known.
    """
    impressions = terms.prior_impressions + counts.known
    amount = terms.prior_conversions * terms.typical + counts.amount
    if impressions.ndim == 0:
        return double(amount / impressions if impressions > 0.0 else terms.expected)
    some = np.where(impressions > 0.0, impressions, 1.0)
    return np.where(impressions > 0.0, amount / some, float(terms.expected))


def beta(counts: Counts, terms: Terms) -> tuple[Numbers, Numbers]:
    """
    The two numbers of a Beta distribution of the mean value as a share of the scale.

    A value x adds x / scale to the first and 1 - x / scale to the second; a published form
    tosses a coin in its place, which adds chance and nothing else. The guess is k0 typical /
    expected impressions at its own mean; with k0 = 0 it is the uniform Beta(1, 1).
    """
    first, second = 1.0, 1.0
    if terms.prior_conversions > 0.0:
        first = max(terms.prior_conversions * terms.typical / terms.scale, LEAST)
        second = max(terms.prior_impressions - first, LEAST)
    successes = np.minimum(counts.amount / terms.scale, counts.known)
    return first + successes, second + counts.known - successes


def prior_in_words(terms: Terms) -> str:
    """What the guess does to a guarantee that was proved without one."""
    if terms.prior_conversions == 0.0:
        return ""
    many = "" if terms.prior_conversions == 1.0 else "s"
    return (
        f" The guess weighs {terms.prior_conversions:g} conversion{many}: what is proved holds "
        "without it, a good guess makes the start cheaper, and one too low can hold bids below "
        "every rival for as long as it outweighs what is seen."
    )
