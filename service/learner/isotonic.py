"""Win rates made monotone in the bid, and exact intervals of shares, for feeds without prices."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from service.learner.arrays import Numbers, double, doubles


class Blocks(NamedTuple):
    """
    Monotone win rates at each place, and the block of pooled places each lies in.

    Args:
        rate: Estimated chance to win; places without trials take that of their neighbour
            before, the first ones are not a number.
        wins: Wins of the block.
        trials: Bids of the block.
    """

    rate: Numbers
    wins: Numbers
    trials: Numbers


def isotonic(wins: ArrayLike, trials: ArrayLike) -> Blocks:
    """
    The most likely monotone win rates: neighbours out of order are pooled until none is left.

    Ayer, Brunk, Ewing, Reid, Silverman, "An empirical distribution function for sampling with
    incomplete information", Annals of Mathematical Statistics 26:641-647, 1955. For bids of
    which only win or loss is known (current-status data) this is the most likely distribution
    of the highest competing bid at those bids. Its error falls like n^(-1/3).

    Args:
        wins: Bids won at each place, ascending; may be fractions.
        trials: Bids made there.
    """
    w, n = doubles(wins, trials)
    tried = np.flatnonzero(n > 0.0)
    block = np.full(w.size, -1, dtype=np.intp)
    pooled = _pooled(w[tried], n[tried])
    block[tried] = np.repeat(np.arange(len(pooled)), [size for _, _, size in pooled])
    block = np.maximum.accumulate(block)
    sums = np.array([(one[0], one[1]) for one in pooled]).reshape(-1, 2)
    return Blocks(*_spread_out(block, sums))


def _pooled(wins: Numbers, trials: Numbers) -> list[tuple[float, float, int]]:
    pooled: list[tuple[float, float, int]] = []
    for w, n in zip(wins.tolist(), trials.tolist(), strict=True):
        won, tried, size = w, n, 1
        while pooled and pooled[-1][0] * tried >= won * pooled[-1][1]:
            before = pooled.pop()
            won, tried, size = won + before[0], tried + before[1], size + before[2]
        pooled.append((won, tried, size))
    return pooled


def _spread_out(block: NDArray[np.intp], sums: Numbers) -> tuple[Numbers, Numbers, Numbers]:
    if not len(sums):
        empty = np.zeros(block.size)
        return np.full(block.size, np.nan), empty, empty
    known = block >= 0
    wins = np.where(known, sums[block, 0], 0.0)
    trials = np.where(known, sums[block, 1], 0.0)
    rate = np.where(known, wins / np.where(known, trials, 1.0), np.nan)
    return double(rate), double(wins), double(trials)


def clopper_pearson(wins: ArrayLike, trials: ArrayLike, level: float) -> tuple[Numbers, Numbers]:
    """
    The exact interval of a share; from 0 to 1 without trials.

    Clopper, Pearson, Biometrika 26:404-413, 1934. On a pooled block it is a rough guide only,
    since the data chose what to pool.
    """
    w, n = doubles(wins, trials)
    tail = (1.0 - level) / 2.0
    # Where nothing or all was won one end is known, and its Beta distribution does not exist.
    none, all_ = w <= 0.0, w >= n
    low = special.betaincinv(np.where(none, 1.0, w), n - w + 1.0, tail)
    high = special.betaincinv(w + 1.0, np.where(all_, 1.0, n - w), 1.0 - tail)
    return np.where(none, 0.0, low), np.where(all_, 1.0, high)


def dkw_reach(count: ArrayLike, level: float) -> Numbers:
    """
    sqrt(ln(2 / alpha) / (2 n)): no empirical distribution is further off anywhere at once.

    Dvoretzky, Kiefer, Wolfowitz, Annals of Mathematical Statistics 27:642-669, 1956, with the
    constant of Massart, Annals of Probability 18:1269-1283, 1990. Infinite without data.
    """
    n = double(count)
    reach = np.sqrt(np.log(2.0 / (1.0 - level)) / (2.0 * np.where(n > 0.0, n, 1.0)))
    return np.where(n > 0.0, reach, np.inf)
