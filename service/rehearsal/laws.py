"""Laws of prices and values that a request may name, read from plain data into distributions."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.random import Generator

from service.learner.arrays import Numbers
from service.rehearsal.market import (
    BasketValues,
    BernoulliValues,
    Draws,
    LognormalBids,
    Nanos,
    UniformBids,
    Values,
)

Said = Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class ExponentialBids:
    """Competing bids exponential with a mean in nanos."""

    mean: int

    def draw(self, rng: Generator, count: int) -> Nanos:
        """So many independent competing bids, rounded up."""
        # Rounded down, a bid a fraction too low would win.
        return np.asarray(np.ceil(rng.exponential(self.mean, count)), dtype=np.int64)


@dataclass(frozen=True, slots=True)
class EmpiricalBids:
    """
    Competing bids as a win curve has them.

    Args:
        prices: Ascending, in nanos.
        chances: The chance that a bid of each price wins; never falling.
        beyond: What competes where the curve ends below 1: more than anybody bids.
    """

    prices: Nanos
    chances: Numbers
    beyond: int

    def draw(self, rng: Generator, count: int) -> Nanos:
        """So many independent competing bids, each a price of the curve."""
        # The curve turned around: the least price whose chance reaches an even draw.
        places = np.searchsorted(self.chances, rng.random(count), side="left")
        return np.append(self.prices, self.beyond)[places]


@dataclass(frozen=True, slots=True)
class EvenValues:
    """Values uniform from `low` to `high`, both included."""

    low: int
    high: int

    @property
    def mean(self) -> float:
        """Mean in nanos."""
        return (self.low + self.high) / 2.0

    def draw(self, rng: Generator, count: int) -> Nanos:
        """So many independent values."""
        return rng.integers(self.low, self.high, count, dtype=np.int64, endpoint=True)


def _empirical(said: Said) -> Draws:
    prices = np.asarray(said["prices"], dtype=np.int64)
    chances = np.asarray(said["chances"], dtype=np.float64)
    return EmpiricalBids(prices, chances, int(said["beyond"]))


_BIDS: dict[str, Callable[[Said], Draws]] = {
    "uniform": lambda said: UniformBids(said["low"], said["high"]),
    "lognormal": lambda said: LognormalBids(said["median"], said["sigma"]),
    "exponential": lambda said: ExponentialBids(said["mean"]),
    "empirical": _empirical,
}
_VALUES: dict[str, Callable[[Said], Values]] = {
    "events": lambda said: BernoulliValues(said["chance"], said["amount"]),
    "baskets": lambda said: BasketValues(said["chance"], said["mean"], said["ceiling"]),
    "even": lambda said: EvenValues(said["low"], said["high"]),
}


def bids_of(said: Said) -> Draws:
    """The law of competing bids that a market names."""
    return _BIDS[said["law"]](said)


def values_of(said: Said) -> Values:
    """The law of values that a market names."""
    return _VALUES[said["law"]](said)
