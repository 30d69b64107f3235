"""Invented markets: competing bids and values drawn from known distributions.

Only a rehearsal knows both for every opportunity, won or not. All money is int64 nanos
per impression, as in production. A bid wins when it is at least the competing bid, so
the competing bid is the least bid that wins, and in second price also what is paid.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

Nanos = NDArray[np.int64]


class Draws(Protocol):
    """A distribution of money."""

    def draw(self, rng: Generator, count: int) -> Nanos:
        """So many independent amounts, in nanos."""
        ...


class Values(Draws, Protocol):
    """A distribution of values whose mean is known."""

    @property
    def mean(self) -> float:
        """Mean in nanos."""
        ...


@dataclass(frozen=True, slots=True)
class Path:
    """One realised sequence of opportunities: what would win each, and its value if won."""

    competing: Nanos
    values: Nanos


@dataclass(frozen=True, slots=True)
class Market:
    """Competing bids and values, independent of each other."""

    competing: Draws
    values: Values

    def path(self, rng: Generator, count: int) -> Path:
        """Draw a sequence of opportunities."""
        return Path(self.competing.draw(rng, count), self.values.draw(rng, count))


@dataclass(frozen=True, slots=True)
class UniformBids:
    """Competing bids uniform on whole nanos from `low` to `high`, both included."""

    low: int
    high: int

    def draw(self, rng: Generator, count: int) -> Nanos:
        """So many independent competing bids."""
        return rng.integers(self.low, self.high, count, dtype=np.int64, endpoint=True)


@dataclass(frozen=True, slots=True)
class LognormalBids:
    """Competing bids with a median in nanos and `sigma`, the spread of their logarithm."""

    median: int
    sigma: float

    def draw(self, rng: Generator, count: int) -> Nanos:
        """So many independent competing bids, rounded up: a fraction less would not win."""
        bids = self.median * np.exp(self.sigma * rng.standard_normal(count))
        return np.asarray(np.ceil(bids), dtype=np.int64)


@dataclass(frozen=True, slots=True)
class BernoulliValues:
    """The same amount with this chance, else nothing."""

    chance: float
    amount: int

    @property
    def mean(self) -> float:
        """Mean in nanos."""
        return self.chance * self.amount

    def draw(self, rng: Generator, count: int) -> Nanos:
        """So many independent values."""
        return np.where(rng.random(count) < self.chance, np.int64(self.amount), np.int64(0))


@dataclass(frozen=True, slots=True)
class BasketValues:
    """With this chance an exponential basket of mean `basket`, cut at the ceiling."""

    chance: float
    basket: int
    ceiling: int

    @property
    def mean(self) -> float:
        """Mean in nanos: the cut takes off exp(-ceiling / basket) of it."""
        return -self.chance * self.basket * math.expm1(-self.ceiling / self.basket)

    def draw(self, rng: Generator, count: int) -> Nanos:
        """So many independent values."""
        converts = rng.random(count) < self.chance
        values = np.zeros(count, dtype=np.int64)
        baskets = rng.exponential(self.basket, int(converts.sum()))
        values[converts] = np.minimum(np.rint(baskets), self.ceiling).astype(np.int64)
        return values
