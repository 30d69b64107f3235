"""Markets that a table of regret is played on, all runs of all of them side by side.

Values are one scale or nothing. A market knows what an impression is worth on average given
its price and its round, so regret is counted without the luck of single values: a round's
best gain is the worth less the price where that is above nothing, and a bid gains it or not.
For a market that stands still this is the best fixed bid; one that moves is compared with
the best bid of each of its segments, of each round where it drifts.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.learner.arrays import double

SCALE = 10**9
VALUE, SMALL_VALUE = 0.3, 0.05
BEFORE, AFTER = 0.8, 0.2  # The mean value on either side of an abrupt change at half time.
DELAY_MEAN, DELAY_MAX = 100.0, 1000  # In rounds.
WIDE, NARROW = (0.525, 0.575), (0.5001, 0.5011)

Shares = NDArray[np.float64]
# One scale fits 32 bits, which halves what all runs together take.
Whole = NDArray[np.int32]


class Drawn(NamedTuple):
    """
    One run of a market, as shares of the scale, one number per round.

    Args:
        prices: Highest competing bid; a bid must be above it.
        hits: Whether the impression is worth one scale.
        worth: What it is worth on average, given its price and the round.
        delays: Rounds until a value is known; 0 for before the next bid.
    """

    prices: Shares
    hits: NDArray[np.bool_]
    worth: Shares
    delays: Whole


Draw = Callable[[Generator, int], Drawn]
Prices = Callable[[Generator, int], Shares]
Worth = Callable[[int], Shares]


@dataclass(frozen=True, slots=True)
class Stage:
    """
    A market and what a tree must be told of it.

    Args:
        name: What it is called in the table.
        says: What it is, in a few words.
        draw: One run of so many rounds.
        cells: Ticks a tree cuts the bids at; its prices lie on them or anywhere between.
        width: Interval around a best fixed bid, as a share of the bids.
    """

    name: str
    says: str
    draw: Draw
    cells: int = 200
    width: float = 0.005


@dataclass(frozen=True, slots=True)
class World:
    """
    Many runs (columns) of one length (rows), in nanos.

    Args:
        competing: Least bid that wins.
        values: Value if won.
        net: What the impression is worth on average, less its price.
        delays: Rounds until a value is known.
    """

    competing: Whole
    values: Whole
    net: Whole
    delays: Whole

    def lost(self, turn: int, won: NDArray[np.bool_]) -> Shares:
        """What each run gains less in a round than the best bid, in nanos."""
        net = self.net[turn]
        return double(np.maximum(net, 0) - np.where(won, net, 0))


def world(stages: Sequence[Stage], rounds: int, runs: int, seed: int) -> World:
    """So many runs of each market, one market after the other; run k is the same in any world."""
    drawn = [
        stage.draw(np.random.default_rng([seed, rounds, *stage.name.encode(), run]), rounds)
        for stage in stages
        for run in range(runs)
    ]
    prices = np.stack([np.floor(one.prices * SCALE) for one in drawn], axis=1).astype(np.int32)
    worth = np.stack([np.rint(one.worth * SCALE) for one in drawn], axis=1).astype(np.int32)
    hits = np.stack([one.hits for one in drawn], axis=1)
    values = np.where(hits, np.int32(SCALE), np.int32(0))
    # A bid must be above the price, and bids are whole nanos.
    return World(prices + 1, values, worth - prices, np.stack([d.delays for d in drawn], axis=1))


def _independent(
    prices: Callable[[Generator, int], Shares], worth: Callable[[int], Shares]
) -> Draw:
    def draw(rng: Generator, rounds: int) -> Drawn:
        mean = worth(rounds)
        hits = rng.random(rounds) < mean
        return Drawn(prices(rng, rounds), hits, mean, np.zeros(rounds, np.int32))

    return draw


def _always(value: float) -> Worth:
    return lambda rounds: np.full(rounds, value)


def _uniform(rng: Generator, rounds: int) -> Shares:
    return rng.random(rounds)


def _margin(alpha: float) -> Prices:
    # Half of the prices below the value; above it a share u^alpha lies within u of it.
    def prices(rng: Generator, rounds: int) -> Shares:
        below = rng.random(rounds) < 0.5
        place = rng.random(rounds)
        above = VALUE + (1.0 - VALUE) * place ** (1.0 / alpha)
        return np.where(below, VALUE * place, above)

    return prices


def _just_above(rng: Generator, rounds: int) -> Shares:
    # The distance at which both terms of UCBid's Theorem 1 agree, the worst for it.
    return np.full(rounds, VALUE + math.sqrt(6.0 * math.log(rounds) / rounds))


def _swing(rounds: int) -> Shares:
    return 0.4 + 0.2 * np.cos(2.0 * np.pi * np.arange(rounds) / rounds)


def _jump(rounds: int) -> Shares:
    return np.where(np.arange(rounds) < rounds // 2, BEFORE, AFTER)


def _late(rng: Generator, rounds: int) -> Drawn:
    told_at_once = _independent(_uniform, _always(VALUE))(rng, rounds)
    delays = np.minimum(rng.exponential(DELAY_MEAN, rounds), DELAY_MAX)
    return told_at_once._replace(delays=delays.astype(np.int32))


def _coin_flip(low: float, high: float) -> Draw:
    def draw(rng: Generator, rounds: int) -> Drawn:
        good = rng.random(rounds) < 0.5
        # Half a nano keeps the floor of a price on its tick.
        prices = np.where(good, low, high) + 0.5 / SCALE
        return Drawn(prices, good, good.astype(np.float64), np.zeros(rounds, np.int32))

    return draw


IID, STEEP, EVEN, FLAT = "iid", "margin 1/2", "margin 1", "margin 2"
SMALL, DRIFT, ABRUPT, LATE = "small value", "drift", "abrupt", "delayed"
COIN_WIDE, COIN_NARROW, HOSTILE = "coin wide", "coin narrow", "just above"

STAGES: dict[str, Stage] = {
    stage.name: stage
    for stage in (
        Stage(IID, "prices uniform, mean value 0.3", _independent(_uniform, _always(VALUE))),
        Stage(STEEP, "many prices near 0.3: alpha 1/2", _independent(_margin(0.5), _always(VALUE))),
        Stage(EVEN, "prices evenly near 0.3: alpha 1", _independent(_margin(1.0), _always(VALUE))),
        Stage(FLAT, "few prices near 0.3: alpha 2", _independent(_margin(2.0), _always(VALUE))),
        Stage(SMALL, "prices uniform, value 0.05", _independent(_uniform, _always(SMALL_VALUE))),
        Stage(DRIFT, "value swings once, 0.6 to 0.2 to 0.6", _independent(_uniform, _swing)),
        Stage(ABRUPT, "value falls from 0.8 to 0.2 at half time", _independent(_uniform, _jump)),
        Stage(LATE, "as iid, values 100 rounds late on average", _late),
        Stage(COIN_WIDE, "coin flip, 0.05 apart", _coin_flip(*WIDE), 40, 0.05),
        Stage(COIN_NARROW, "coin flip, 0.001 apart", _coin_flip(*NARROW), 10_000, 0.001),
        Stage(HOSTILE, "one price just above the value", _independent(_just_above, _always(VALUE))),
    )
}
