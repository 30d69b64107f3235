"""Bidders of a table of regret: the service's own index formulas, and the baselines.

Every bidder plays all runs of a world at once, each with its own counts, and is told its
values when they come. Forgetting is the plain recursion on the counts, every round.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Protocol

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.decision.counts import Counts, nothing
from service.learner.drift import discount_factor, window_length
from service.rehearsal.exp3 import Exp3, exp3_rate
from service.rehearsal.market import Nanos
from service.rehearsal.regret import uniform_terms
from service.rehearsal.run import bids_of
from service.rehearsal.worlds import DELAY_MAX, SCALE, Shares, World

GRID_POINTS = 11
CHANGES = 1  # The number of changes that methods which forget are tuned for.
TRIES = 25.0  # Epsilon-greedy bids the cap with chance TRIES / t.
# No value is later than that, so no place is filled for two rounds at once.
RING = DELAY_MAX + 1

Won = NDArray[np.bool_]


class Bidder(Protocol):
    """What plays all runs of a world."""

    def bids(self, turn: int) -> Nanos:
        """One bid for each run, in nanos."""
        ...

    def learn(self, turn: int, won: Won, world: World) -> None:
        """Take in what the round told."""
        ...


Make = Callable[[int, int, Generator], Bidder]  # Runs, rounds and chance to a bidder.


def play(world: World, bidder: Bidder) -> Shares:
    """The regret of each run, in scales."""
    rounds, runs = world.competing.shape
    regret = np.zeros(runs)
    for turn in range(rounds):
        won = world.competing[turn] <= bidder.bids(turn)
        regret += world.lost(turn, won)
        bidder.learn(turn, won, world)
    return regret / SCALE


class _Forgetting:
    """Counts of every run, with the old discounted or dropped."""

    def __init__(self, runs: int, gamma: float, window: int | None) -> None:
        self.counts = nothing(runs)
        self._gamma, self._window = gamma, window
        self._kept: list[tuple[Shares, Shares]] = []

    def add(self, known: Shares, hits: Shares) -> None:
        rounds, more, amount = np.ones_like(known), known, hits
        if self._window is not None:
            self._kept.append((known, hits))
            if len(self._kept) > self._window:
                old_known, old_hits = self._kept[-1 - self._window]
                rounds, more, amount = 0.0 * known, known - old_known, hits - old_hits
        added = (rounds, more, amount, amount * SCALE, amount * float(SCALE) ** 2)
        old = self.counts.all
        self.counts = Counts(*(self._gamma * a + b for a, b in zip(old, added, strict=True)))


class Learner:
    """
    A method of the service on the unit scale.

    Args:
        method: Its name.
        runs: Columns of the world.
        rng: For methods that draw.
        gamma: Factor on all counts in every round.
        window: Rounds that count; None for all.
        tries: The chance of bidding the cap in a round, from 0.
        prior: Conversions that a guess of half the scale weighs.
    """

    def __init__(
        self,
        method: str,
        runs: int,
        rng: Generator,
        *,
        gamma: float = 1.0,
        window: int | None = None,
        tries: Callable[[int], float] | None = None,
        prior: float = 0.0,
    ) -> None:
        self._terms = uniform_terms(method, prior=prior)
        self._sums = _Forgetting(runs, gamma, window)
        self._known, self._hits = np.zeros((RING, runs)), np.zeros((RING, runs))
        self._tries, self._rng = tries, rng

    def bids(self, turn: int) -> Nanos:
        """The price of the method, or the cap where it tries."""
        bids = bids_of(self._sums.counts, self._terms, 1, self._rng)[:, 0]
        if self._tries is None:
            return bids
        return np.where(self._rng.random(bids.size) < self._tries(turn), SCALE, bids)

    def learn(self, turn: int, won: Won, world: World) -> None:
        """Put the values of this round where they are due, and take those due now."""
        due, runs = (turn + world.delays[turn]) % RING, np.arange(won.size)
        self._known[due, runs] += won
        self._hits[due, runs] += won & (world.values[turn] > 0)
        now = turn % RING
        # Copied, for the window keeps them while the ring writes over its own.
        self._sums.add(self._known[now].copy(), self._hits[now].copy())
        self._known[now] = self._hits[now] = 0.0


class Grid:
    """EXP3 on bids 0, 0.1, ... 1; a late reward is credited at the chance it was played with."""

    def __init__(self, runs: int, rounds: int, rng: Generator) -> None:
        self._exp3 = Exp3(runs, GRID_POINTS, exp3_rate(GRID_POINTS, rounds))
        self._grid = np.arange(GRID_POINTS, dtype=np.int64) * (SCALE // (GRID_POINTS - 1))
        self._credits = np.zeros((RING, runs, GRID_POINTS))
        self._arms, self._rng = np.zeros(runs, np.int64), rng

    def bids(self, turn: int) -> Nanos:
        """One point of the grid for each run."""
        self._arms = self._exp3.draw(self._rng)
        return self._grid[self._arms]

    def learn(self, turn: int, won: Won, world: World) -> None:
        """Credit what the round gained, between -1 and 1, when it is known."""
        # The competing bid is the least that wins, a nano above the price.
        gained = np.where(won, world.values[turn] - (world.competing[turn] - 1), 0) / SCALE
        due = np.where(won, turn + world.delays[turn], turn) % RING
        credits = self._exp3.credits(self._arms, (gained + 1.0) / 2.0)
        self._credits[due, np.arange(won.size)] += credits
        self._exp3.add(self._credits[turn % RING])
        self._credits[turn % RING] = 0.0


def _plain(method: str, prior: float = 0.0) -> Make:
    return lambda runs, rounds, rng: Learner(method, runs, rng, prior=prior)


def _discounted(method: str) -> Make:
    return lambda runs, rounds, rng: Learner(
        method, runs, rng, gamma=float(discount_factor(rounds, CHANGES))
    )


def _windowed(method: str) -> Make:
    return lambda runs, rounds, rng: Learner(
        method, runs, rng, window=math.ceil(window_length(rounds, CHANGES))
    )


def _now_and_then(runs: int, rounds: int, rng: Generator) -> Bidder:
    return Learner("mean", runs, rng, tries=lambda turn: TRIES / (turn + 1.0))


def _first(runs: int, rounds: int, rng: Generator) -> Bidder:
    return Learner("mean", runs, rng, tries=lambda turn: float(turn < math.ceil(rounds**0.5)))


UCBID, KL, BERNSTEIN = "ucbid", "kl-ucbid", "bernstein-ucbid"
BAYES, THOMPSON, QUANTILE = "bayes-ucb", "thompson", "posterior-quantile"
DISCOUNTED_UCBID, DISCOUNTED_KL = "ucbid, discounted", "kl-ucbid, discounted"
WINDOWED_UCBID, WINDOWED_KL = "ucbid, window", "kl-ucbid, window"
GREEDY, EPSILON = "greedy mean", "epsilon-greedy"
EXPLORE, EXP3 = "explore, then greedy", "exp3 grid"

BIDDERS: dict[str, Make] = {
    UCBID: _plain("ucbid"),
    KL: _plain("kl-ucbid"),
    BERNSTEIN: _plain("bernstein-ucbid"),
    BAYES: _plain("bayes-ucb"),
    THOMPSON: _plain("thompson"),
    QUANTILE: _plain("posterior-quantile", prior=1.0),
    DISCOUNTED_UCBID: _discounted("ucbid"),
    DISCOUNTED_KL: _discounted("kl-ucbid"),
    WINDOWED_UCBID: _windowed("ucbid"),
    WINDOWED_KL: _windowed("kl-ucbid"),
    GREEDY: _plain("mean"),
    EPSILON: _now_and_then,
    EXPLORE: _first,
    EXP3: lambda runs, rounds, rng: Grid(runs, rounds, rng),
}
BASELINES = (GREEDY, EPSILON, EXPLORE, EXP3)
