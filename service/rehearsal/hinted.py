"""Bidding the caller's own predictions against bidding one learnt value, at like spend.

Apart from `paced`, which knows its values: here every impression has its own expected value,
the caller predicts it up to one factor, and values come by chance and rarely.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.random import Generator

from service.learner import hints, pacing
from service.learner.hints import Hints, Prior
from service.learner.pacing import Pace
from service.rehearsal.market import Draws, Nanos

ORDER = 0.75  # As in the service's rule for rare values: a mean bids too little when it is low.
BLOCK = 100  # How often the ratio is read again, in rounds, as a snapshot is.


@dataclass(frozen=True, slots=True)
class Offers:
    """
    A sequence of impression opportunities; nanos.

    Args:
        expected: Mean value of each.
        hinted: What the caller predicts of each.
        events: The value that would come of each.
        competing: Least bid that wins each, and the price.
    """

    expected: Nanos
    hinted: Nanos
    events: Nanos
    competing: Nanos


@dataclass(frozen=True, slots=True)
class Earned:
    """
    What a bidder came to; nanos.

    Args:
        surplus: Mean values less prices over what was won, so that no luck of events is in it.
        spent: Prices paid.
        wins: Number won.
        ratio: Value per hint that was learnt.
    """

    surplus: int
    spent: int
    wins: int
    ratio: float


def lognormal(
    rng: Generator, count: int, mean: int, spread: float, factor: float, event: int, rivals: Draws
) -> Offers:
    """
    Mean values lognormal, competing bids independent of them.

    Args:
        rng: The only source of chance.
        count: Opportunities.
        mean: Mean of the mean values.
        spread: Standard deviation of their logarithm.
        factor: Hint per mean value.
        event: Value of one event; chances follow.
        rivals: Competing bids.
    """
    drawn = mean * np.exp(spread * rng.standard_normal(count) - spread**2 / 2.0)
    # The chance of an event is at most one, so no mean value is above that of an event.
    expected = np.minimum(np.rint(drawn), event).astype(np.int64)
    events = np.where(rng.random(count) < expected / event, np.int64(event), np.int64(0))
    hinted = np.rint(factor * expected).astype(np.int64)
    return Offers(expected, hinted, events, rivals.draw(rng, count))


def by_hints(offers: Offers, budget: int, rules: pacing.Rules, prior: Prior) -> Earned:
    """
    Bid the calibrated hint, a quantile of what it may stand for, paced to the budget.

    Args:
        offers: What is on sale.
        budget: Money for all of it.
        rules: How the multiplier moves.
        prior: What is believed of hints.
    """
    rounds, seen = offers.expected.size, Hints()
    # Half the bid, the mean price where competing bids are uniform.
    pace = Pace.fresh(rules, 0, int(offers.hinted.mean() * prior.ratio / 2.0))
    spent = surplus = 0
    ratio = hints.ratio_quantile(seen, prior, ORDER)
    columns = (offers.hinted, offers.competing, offers.expected, offers.events)
    for at, row in enumerate(zip(*(column.tolist() for column in columns), strict=True)):
        hint, rival, expected, event = row
        if at % BLOCK == 0:
            ratio = hints.ratio_quantile(seen, prior, ORDER)
        of_budget = pacing.UNITS / (pacing.UNITS + pace.multiplier(rules))
        bid = pacing.within(int(hint * ratio * of_budget), budget - spent)
        price = rival if bid >= rival else 0
        if bid >= rival:
            spent, surplus = spent + rival, surplus + expected - rival
            seen = hints.learn(seen, hint, event)
        # As differences of whole sums, so that the parts add up to the budget.
        due = budget * (at + 1) // rounds - budget * at // rounds
        pace = pacing.learn(pace, pacing.Seen(1, int(bid >= rival), price), due, rules)
    return Earned(surplus, spent, seen.impressions, hints.ratio(seen, prior))


def by_one_value(offers: Offers, budget: int, rules: pacing.Rules, prior: Prior) -> Earned:
    """
    Bid one learnt value for everything: the same learner, to whom all hints look like their mean.

    Arguments as for `by_hints`.
    """
    alike = np.full_like(offers.hinted, int(offers.hinted.mean()))
    return by_hints(replace(offers, hinted=alike), budget, rules, prior)
