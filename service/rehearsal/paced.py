"""Bidding under a budget or a return target, round by round, with the multipliers of production.

Apart from `run`, which plays without a budget: here a bid changes what can be bid later. The
exchange is second-price and tells outcomes at once; a bid is cut at the money left.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.decision.counts import Counts
from service.decision.methods import METHODS
from service.decision.terms import Terms
from service.learner import pacing, return_target
from service.learner.pacing import Pace
from service.learner.return_target import Return
from service.rehearsal.market import Nanos

# How often a value that is learnt is read again, in rounds, as a snapshot is.
BLOCK = 100


@dataclass(frozen=True, slots=True)
class Spending:
    """What a bidder has seen; money in nanos, values only of what was won."""

    rounds: int = 0
    wins: int = 0
    converted: int = 0
    amount: int = 0
    amount_square: int = 0


@dataclass(frozen=True, slots=True)
class Paced:
    """
    What a run under a budget came to.

    Args:
        won: Which rounds were won.
        spent: Nanos paid.
        multipliers: Mu in each round.
    """

    won: NDArray[np.bool_]
    spent: int
    multipliers: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Returned:
    """
    What a run under a return target came to; nanos.

    Args:
        valued: Values won.
        paid: Prices paid.
        slack_least: The least of value / target - paid at any time: below 0, a violation.
        slack: The same at the end.
        lambda_mean: Mean of the multiplier over the rounds.
    """

    valued: int
    paid: int
    slack_least: int
    slack: int
    lambda_mean: float


def known(values: Nanos) -> Callable[[int, Spending], float]:
    """A bidder who knows the value of each opportunity."""
    worth = values.tolist()
    return lambda at, _: float(worth[at])


def learnt(terms: Terms) -> Callable[[int, Spending], float]:
    """A bidder who learns one value by a method of the service, from what it won."""
    method, value = METHODS[terms.method], 0.0

    def guess(at: int, seen: Spending) -> float:
        nonlocal value
        if at % BLOCK == 0:
            value = float(method.index(_counts(seen), terms))
        return value

    return guess


def play(
    values: Nanos,
    competing: Nanos,
    budget: int,
    rules: pacing.Rules,
    start: Pace,
    guess: Callable[[int, Spending], float],
    replan: bool = True,
) -> Paced:
    """
    Adaptive pacing at an even rate.

    Args:
        values: What each opportunity is worth if won.
        competing: Least bid that wins, and the price.
        budget: Money for all rounds.
        rules: How the multiplier moves.
        start: The multiplier at first.
        guess: Value bid on, by round and what was seen.
        replan: Whether the rate is what is left over the rounds left, as production plans;
            else it stays budget / rounds, as published.
    """
    rounds, left, pace, seen = values.size, budget, start, Spending()
    won, multipliers = np.zeros(rounds, np.bool_), np.zeros(rounds)
    for at, (value, rival) in enumerate(zip(values.tolist(), competing.tolist(), strict=True)):
        multiplier = pace.multiplier(rules)
        wanted = guess(at, seen) * pacing.UNITS / (pacing.UNITS + multiplier)
        wins = pacing.within(int(wanted), left) >= rival
        won[at], multipliers[at] = wins, multiplier / pacing.UNITS
        due = left // (rounds - at) if replan else budget // rounds
        left -= rival if wins else 0
        pace = pacing.learn(pace, pacing.Seen(1, int(wins), rival if wins else 0), due, rules)
        seen = _saw(seen, value if wins else None)
    return Paced(won, budget - left, multipliers)


def play_return(
    values: Nanos,
    competing: Nanos,
    rules: return_target.Rules,
    strict: bool = False,
    budget: int | None = None,
    pace_rules: pacing.Rules | None = None,
) -> Returned:
    """
    Buy value under a return target, values known, and under a budget where one is given.

    Args:
        values: What each opportunity is worth if won.
        competing: Least bid that wins, and the price.
        rules: The target.
        strict: Whether the target may never be missed on the way.
        budget: Money for all rounds; needs the rules of pacing.
        pace_rules: How the multiplier of the budget moves.
    """
    state, lambdas, least = Return(), 0.0, 0
    pace = None if pace_rules is None else Pace.fresh(pace_rules)
    rate = 0 if budget is None else budget // values.size
    for value, rival in zip(values.tolist(), competing.tolist(), strict=True):
        lambdas += state.multiplier
        of_budget = 0 if pace is None or pace_rules is None else pace.multiplier(pace_rules)
        wanted = int(float(return_target.bid(value, state.multiplier, of_budget, rules)))
        if strict:
            wanted = return_target.strict_bid(wanted, value, state.slack(rules), 0, rules)
        if budget is not None:
            wanted = pacing.within(wanted, budget - state.paid)
        price = rival if wanted >= rival else 0
        if wanted >= rival:
            state = return_target.learn(state, value, price, rules)
            least = min(least, state.slack(rules))
        if pace is not None and pace_rules is not None:
            pace = pacing.learn(pace, pacing.Seen(1, int(wanted >= rival), price), rate, pace_rules)
    mean = lambdas / values.size
    return Returned(state.valued, state.paid, least, state.slack(rules), mean)


def uniform(rng: Generator, rounds: int, scale: int) -> tuple[Nanos, Nanos]:
    """Values and competing bids uniform on the whole nanos from 0 to the scale."""
    drawn = rng.integers(0, scale, (2, rounds), dtype=np.int64, endpoint=True)
    return drawn[0], drawn[1]


def _saw(seen: Spending, value: int | None) -> Spending:
    if value is None:
        return Spending(seen.rounds + 1, *_sums(seen))
    return Spending(
        seen.rounds + 1,
        seen.wins + 1,
        seen.converted + (value > 0),
        seen.amount + value,
        seen.amount_square + value * value,
    )


def _sums(seen: Spending) -> tuple[int, int, int, int]:
    return seen.wins, seen.converted, seen.amount, seen.amount_square


def _counts(seen: Spending) -> Counts:
    numbers = (np.asarray(float(one)) for one in (seen.rounds, *_sums(seen)))
    return Counts(*numbers)
