"""Exponential weights over a fixed grid of bids: a baseline for rehearsals, never a policy.

EXP3 and EXP3.P: Auer, Cesa-Bianchi, Freund, Schapire, "The Nonstochastic Multiarmed Bandit
Problem", SIAM Journal on Computing 32(1):48-77, 2002, written from memory. Both learn from
the one bid they made and know no other than those of the grid. A seller who moves between
its points defeats every such grid: Weed, Perchet, Rigollet, "Online learning in repeated
auctions", COLT 2016, Proposition 11.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.rehearsal.market import Nanos, Path

Shares = NDArray[np.float64]


def exp3_rate(arms: int, most: float) -> float:
    """
    min{1, sqrt(K ln K / ((e-1) g))}: the share of chance spread evenly, and learning rate.

    Args:
        arms: Choices K.
        most: Reward g that no single arm exceeds; the number of rounds if nothing is known.
    """
    return min(1.0, math.sqrt(arms * math.log(arms) / ((math.e - 1.0) * most)))


def exp3_bound(arms: int, most: float) -> float:
    """2 sqrt(e-1) sqrt(g K ln K) at the rate of `exp3_rate`, for rewards between 0 and 1."""
    return 2.0 * math.sqrt(math.e - 1.0) * math.sqrt(most * arms * math.log(arms))


def exp3_bound_at(rate: float, arms: int, most: float) -> float:
    """(e-1) rate g + K ln K / rate at any rate up to 1."""
    return (math.e - 1.0) * rate * most + arms * math.log(arms) / rate


def exp3p_rate(arms: int, rounds: float) -> float:
    """min{3/5, 2 sqrt(3 K ln K / (5 T))}: the rate of EXP3.P."""
    return min(0.6, 2.0 * math.sqrt(0.6 * arms * math.log(arms) / rounds))


def exp3p_bonus(arms: int, rounds: float, risk: float) -> float:
    """2 sqrt(ln(K T / risk)): the weight that EXP3.P gives to what it seldom looks at."""
    return 2.0 * math.sqrt(math.log(arms * rounds / risk))


def exp3p_start(arms: int, rounds: float, risk: float) -> float:
    """exp(bonus rate / 3 sqrt(T / K)): every weight of EXP3.P before the first round."""
    exponent = exp3p_bonus(arms, rounds, risk) * exp3p_rate(arms, rounds) / 3.0
    return math.exp(exponent * math.sqrt(rounds / arms))


def exp3p_bound(arms: int, rounds: float, risk: float) -> float:
    """
    4 sqrt(K T ln(K T / risk)) + 4 sqrt(5/3 K T ln K) + 8 ln(K T / risk).

    What EXP3.P loses more than with at most the chance `risk`.
    """
    log = math.log(arms * rounds / risk)
    by_luck = 4.0 * math.sqrt(arms * rounds * log)
    return by_luck + 4.0 * math.sqrt(5.0 / 3.0 * arms * rounds * math.log(arms)) + 8.0 * log


class Exp3:
    """
    EXP3, or EXP3.P if it has a bonus, for many independent runs at once.

    Weights are kept as logarithms, and equal ones cancel, so EXP3.P starts from zero too.

    Args:
        runs: Independent runs.
        arms: Choices K.
        rate: From `exp3_rate` or `exp3p_rate`.
        lift: 0 for EXP3; for EXP3.P its bonus over sqrt(K T).
    """

    def __init__(self, runs: int, arms: int, rate: float, lift: float = 0.0) -> None:
        self._rate, self._lift = rate, lift
        # EXP3.P steps by a third of the rate, as its authors have it (from memory).
        self._step = rate / arms if lift == 0.0 else rate / (3.0 * arms)
        self._logs = np.zeros((runs, arms))

    @property
    def weights(self) -> Shares:
        """The weight of each arm, one row for each run, over the weight it began with."""
        return np.exp(self._logs)

    def chances(self) -> Shares:
        """The chance of each arm, one row for each run."""
        # The largest is taken off, which moves no ratio and keeps the exponential in range.
        weights = np.exp(self._logs - self._logs.max(axis=1, keepdims=True))
        even = self._rate / weights.shape[1]
        mixed = (1.0 - self._rate) * weights / weights.sum(axis=1, keepdims=True) + even
        return np.asarray(mixed, dtype=np.float64)

    def draw(self, rng: Generator) -> NDArray[np.int64]:
        """One arm for each run."""
        # Rounding may leave the last sum short of 1, and then no arm would be drawn.
        below = np.cumsum(self.chances(), axis=1)[:, :-1]
        return np.asarray((rng.random((below.shape[0], 1)) > below).sum(axis=1), dtype=np.int64)

    def learn(self, arms: NDArray[np.int64], rewards: Shares) -> None:
        """Credit the arm each run played with its reward between 0 and 1."""
        self.add(self.credits(arms, rewards))

    def credits(self, arms: NDArray[np.int64], rewards: Shares) -> Shares:
        """What `learn` would add to the log-weights at the chances of now."""
        runs, chances = np.arange(arms.size), self.chances()
        credits = self._step * self._lift / chances
        credits[runs, arms] += self._step * rewards / chances[runs, arms]
        return credits

    def add(self, credits: Shares) -> None:
        """Add to the log-weights, now or late."""
        self._logs += credits


def play_exp3(paths: Sequence[Path], grid: Nanos, scale: int, rng: Generator) -> Nanos:
    """
    The surplus of EXP3 on each of many sequences of one length, in nanos, second price.

    A surplus u in [-1, 1] scales is the reward (u + 1) / 2, so regret in scales is at most
    twice `exp3_bound`.

    Args:
        paths: Competing bids and values.
        grid: The bids to choose from, in nanos.
        scale: What no value and no competing bid exceeds, in nanos.
        rng: The only source of chance.
    """
    competing = np.stack([path.competing for path in paths])
    gains = np.stack([path.values for path in paths]) - competing
    rounds = competing.shape[1]
    learner = Exp3(len(paths), grid.size, exp3_rate(grid.size, rounds))
    surplus = np.zeros(len(paths), np.int64)
    for turn in range(rounds):
        arms = learner.draw(rng)
        earned = np.where(competing[:, turn] <= grid[arms], gains[:, turn], 0)
        surplus += earned
        # Surplus lies between -1 and 1 scales, the rewards of EXP3 between 0 and 1.
        learner.learn(arms, (earned / scale + 1.0) / 2.0)
    return surplus
