"""What is published about each bidder of a table of regret on each market, apart from playing.

Only what is stated for exactly that market and that benchmark counts: a bound against the
best fixed bid says nothing of a market whose best bid moves, and none is known for late
values in these auctions. Everything is in scales. Sources: Weed, Perchet, Rigollet, "Online
learning in repeated auctions", COLT 2016 ("WPR"); Achddou, Cappé, Garivier, "Efficient
Algorithms for Stochastic Repeated Second-price Auctions", ALT 2021 ("ACG"); Auer,
Cesa-Bianchi, Freund, Schapire, SIAM J. Comput. 32(1), 2002 (EXP3, from memory).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from service.learner import exptree_bounds
from service.learner.bounds import ucbid_regret_bound
from service.rehearsal import contest, tree_contest, worlds
from service.rehearsal.exp3 import exp3_bound

NO_BOUND = "no bound"
ORDER_ONLY = "order only"


@dataclass(frozen=True, slots=True)
class Growth:
    """How regret grows with the number of rounds, as a formula in words and in numbers."""

    words: str
    of: Callable[[float], float]


LINEAR = Growth("T", lambda t: t)
ROOT = Growth("sqrt(T)", math.sqrt)
ROOT_LOG = Growth("sqrt(T ln T)", lambda t: math.sqrt(t * math.log(t)))
QUARTER = Growth("T^(1/4) ln^(3/4) T", lambda t: t**0.25 * math.log(t) ** 0.75)
LOG_SQUARE = Growth("ln^2 T", lambda t: math.log(t) ** 2)
LOG = Growth("ln T", math.log)

# Markets whose values are independent, alike, and told at once, whatever the prices do.
ALIKE = (worlds.IID, worlds.STEEP, worlds.EVEN, worlds.FLAT, worlds.SMALL, worlds.HOSTILE)
# Those with a best fixed bid; 0.3 is on the grid, and above nothing no bid is best in `HOSTILE`.
FIXED = (*ALIKE, worlds.COIN_WIDE, worlds.COIN_NARROW)
ON_GRID = (worlds.IID, worlds.STEEP, worlds.EVEN, worlds.FLAT, worlds.HOSTILE)
COINS = (worlds.COIN_WIDE, worlds.COIN_NARROW)
# Prices with a density between two bounds.
BOUNDED = (worlds.IID, worlds.EVEN, worlds.SMALL)


def growth(method: str, market: str) -> Growth | None:
    """
    The published growth of a bidder's regret on a market; an upper bound but for two.

    The grid on a coin flip loses a share of all rounds (WPR, Proposition 11), and so does the
    greedy mean where it may stop winning at its first value: these are lower bounds.
    """
    if method == contest.UCBID:
        return _of_ucbid(market)
    if method in (contest.KL, contest.BERNSTEIN) and market in ALIKE:
        return LOG_SQUARE if market in BOUNDED else ROOT_LOG
    if method in tree_contest.KNOWN and market in FIXED:
        return ROOT
    if method == contest.EXP3:
        return LINEAR if market in COINS else ROOT if market in ON_GRID else None
    greedy = method == contest.GREEDY and market in ALIKE and market != worlds.HOSTILE
    return LINEAR if greedy else None


def _of_ucbid(market: str) -> Growth | None:
    by_margin = {worlds.STEEP: QUARTER, worlds.FLAT: LOG, worlds.HOSTILE: ROOT_LOG}
    return by_margin.get(market, LOG_SQUARE if market in BOUNDED else None)


def bound(method: str, market: str, rounds: int) -> float | str:
    """What a bidder may lose in so many rounds, in scales, or the words that say why not."""
    width = worlds.STAGES[market].width
    if method == contest.UCBID and market in ALIKE:
        # Every price stands so far above the value, so here the gap of Theorem 1 is known.
        gap = None if market != worlds.HOSTILE else math.sqrt(6.0 * math.log(rounds) / rounds)
        return float(ucbid_regret_bound(rounds, gap))
    if method == tree_contest.TREE and market in FIXED:
        return exptree_bounds.exptree_bound(rounds, width)
    if method == tree_contest.TREE_WINS and market in FIXED:
        return exptree_bounds.win_only_bound(rounds, width)
    if method == contest.EXP3 and market in ON_GRID:
        # Utilities between -1 and 1 are twice the rewards it is stated for.
        return 2.0 * exp3_bound(contest.GRID_POINTS, rounds)
    if method in (contest.KL, contest.BERNSTEIN) and market in ALIKE:
        return ORDER_ONLY
    return NO_BOUND


def exponent(horizons: Sequence[int], regrets: Sequence[float]) -> float:
    """The slope of ln regret on ln T by least squares; not a number where something is not lost."""
    if len(horizons) < 2 or min(regrets) <= 0.0:
        return math.nan
    slope, _ = np.polyfit(np.log(horizons), np.log(regrets), 1)
    return float(slope)
