"""A seller who learns its floor from what bidders pay, against a market that stays as it is.

Cesa-Bianchi, Gentile, Mansour, "Regret Minimization for Reserve Prices in Second-Price
Auctions", SODA 2013 and IEEE Transactions on Information Theory 61(1), 2015: in stages of T^(1 -
2^-i) rounds the seller keeps one floor and estimates the law of the second bid above it;
the next floor is the least that may still be best. Regret is of order sqrt(T). It holds for
bidders whose bids are independent and alike; bidders who learn are not, and then it is a
seller who thinks so. The width of the confidence is from memory.
"""

from __future__ import annotations

import math

import numpy as np

from service.learner.arrays import Numbers, double

CELLS = 1000  # Floors looked at, evenly from 0 to the top.
DELTA = 0.05
_SHARES = np.linspace(0.0, 1.0, 2001)


class LearningSeller:
    """
    One seller; money in nanos.

    Args:
        bidders: Number m of bidders in every auction, at least two.
        rounds: Number T of auctions it plans for.
        top: The largest bid it reckons with.
    """

    def __init__(self, bidders: int, rounds: int, top: int) -> None:
        self._bidders, self._top = bidders, top
        self._ends = _stage_ends(rounds)
        self._stages = len(self._ends)
        self._second = np.zeros(CELLS + 1)
        self._seen = 0
        self._floor_cell = 0
        self._best_cell = 0
        self._heard = 0
        # The law of the highest bid by that of the second, for this many bidders.
        m = float(bidders)
        self._of_second = m * _SHARES ** (m - 1.0) - (m - 1.0) * _SHARES**m

    @property
    def floor(self) -> int:
        """The floor of the next auction."""
        return self._floor_cell * self._top // CELLS

    @property
    def best(self) -> int:
        """The floor that looks best by what was seen up to the last stage."""
        return self._best_cell * self._top // CELLS

    def saw(self, second: int) -> None:
        """
        Take in one auction.

        Args:
            second: The second highest bid; below the floor it looks like no bid at all.
        """
        # Rounded up: a bid must not count as lying below a floor that it reaches.
        cell = min(CELLS, -(-second * CELLS // self._top))
        self._second[max(cell, self._floor_cell)] += 1.0
        self._seen, self._heard = self._seen + 1, self._heard + 1
        if self._ends and self._heard >= self._ends[0]:
            self._ends.pop(0)
            self._next_stage()

    def _next_stage(self) -> None:
        prices = np.arange(self._floor_cell, CELLS + 1) / CELLS
        second = double(np.cumsum(self._second)[self._floor_cell :] / self._seen)
        revenue, width = self._revenue(prices, second), self._width(prices, second)
        best = int(np.argmax(revenue))
        candidates = revenue >= revenue[best] - 2.0 * width[best] - 2.0 * width
        self._best_cell = self._floor_cell + best
        self._floor_cell += int(np.flatnonzero(candidates)[0])
        # A floor hides bids below it, so what was seen under another one is not mixed in.
        self._second, self._seen = np.zeros(CELLS + 1), 0

    def _revenue(self, prices: Numbers, second: Numbers) -> Numbers:
        """Up to a constant: the area under the law of the second bid, less p times no sale."""
        highest = np.interp(second, self._of_second, _SHARES) ** self._bidders
        area = np.append(0.0, np.cumsum(second[:-1] * np.diff(prices)))
        return double(area - prices * highest)

    def _width(self, prices: Numbers, second: Numbers) -> Numbers:
        log = math.log(6.0 * self._stages / DELTA)
        # Where no sale was ever seen the width would be without end.
        some = np.maximum(1.0 - second, 1.0 / self._seen) * self._seen
        return double(prices * np.sqrt(2.0 * log / some))


def _stage_ends(rounds: int) -> list[int]:
    """When each stage ends but the last, which never does: T^(1 - 2^-i) rounds each."""
    ends, power, total = list[int](), 0.5, 0
    while total < rounds:
        length = max(1, math.ceil(rounds ** (1.0 - power)))
        # Stages grow up to about T / 2; a few more of those say nothing new.
        if total + length >= rounds:
            break
        total += length
        ends.append(total)
        power /= 2.0
    return ends
