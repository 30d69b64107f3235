"""A second-price market whose values hang on features, played with them and without them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.learner import bounds, hashing, linear
from service.learner.arrays import Numbers, double
from service.learner.hashing import Feature

FEATURES: dict[str, tuple[Feature, ...]] = {
    "device": ("phone", "tablet", "desk"),
    "place": ("top", "side"),
    "returning": (True, False),
}
# Chance of a value of 1 by category; the sum of the three lies between 0.05 and 0.85.
WORTH: dict[str, tuple[float, ...]] = {
    "device": (0.05, 0.2, 0.4),
    "place": (0.3, 0.0),
    "returning": (0.15, 0.0),
}


class Regret(NamedTuple):
    """What was lost against bidding the true value, summed up to each round."""

    linear: Numbers
    featureless: Numbers


@dataclass(frozen=True, slots=True)
class Featured:
    """
    The market and its learner.

    Args:
        dimensions: Length of the hashed vector.
        key: Of the hash.
        delta: Chance that the ellipsoid misses.
        length: Bound on the length of the true weights.
    """

    dimensions: int = 16
    key: bytes = b"rehearsal"
    delta: float = 0.05
    length: float = 1.0

    def play(self, rng: Generator, rounds: int) -> Regret:
        """Competing bids are uniform; values are 0 or 1, and seen on a win only."""
        levels = np.stack([rng.integers(0, len(of), rounds) for of in FEATURES.values()], axis=1)
        worth = sum(np.array(of)[levels[:, at]] for at, of in enumerate(WORTH.values())) + np.zeros(
            rounds
        )
        competing, values = rng.random(rounds), (rng.random(rounds) < worth).astype(float)
        with_features = self._linear(levels, competing, values)
        without = _featureless(competing, values)
        lost = [_lost(worth, competing, bids) for bids in (with_features, without)]
        return Regret(*(double(np.cumsum(one)) for one in lost))

    def vector(self, levels: tuple[int, ...]) -> Numbers:
        """The hashed features of an impression with these categories."""
        chosen = {name: of[at] for (name, of), at in zip(FEATURES.items(), levels, strict=True)}
        return hashing.dense(hashing.hashed(chosen, self.key), self.dimensions)

    def _linear(self, levels: NDArray[np.int64], competing: Numbers, values: Numbers) -> Numbers:
        rows = [tuple(row) for row in levels.tolist()]
        vectors = {row: self.vector(row) for row in set(rows)}
        ridge, bids = linear.Ridge.fresh(self.dimensions), np.zeros(len(rows))
        for at, row in enumerate(rows):
            x = vectors[row]
            # The noise of a value that is 0 or 1 is half its range.
            bids[at] = min(float(ridge.upper(x, 0.5, self.length, self.delta)), 1.0)
            if competing[at] <= bids[at]:
                ridge = linear.learn(ridge, [linear.Lesson(x, float(values[at]))])
        return bids


def _featureless(competing: Numbers, values: Numbers) -> Numbers:
    bids, known, total = np.zeros(len(values)), 0, 0.0
    for at in range(len(values)):
        mean = total / max(known, 1)
        bids[at] = float(bounds.kl_ucbid_index(mean, at + 1, known, 1.0))
        if competing[at] <= bids[at]:
            known, total = known + 1, total + float(values[at])
    return bids


def _lost(worth: Numbers, competing: Numbers, bids: Numbers) -> Numbers:
    return double(np.maximum(worth - competing, 0.0) - (worth - competing) * (competing <= bids))


def exponent(regret: Numbers, first: int) -> float:
    """The slope of ln regret over ln T, at doublings of T from `first` on."""
    rounds = first * 2 ** np.arange(int(np.log2(len(regret) / first)) + 1)
    return float(np.polyfit(np.log(rounds), np.log(regret[rounds - 1]), 1)[0])
