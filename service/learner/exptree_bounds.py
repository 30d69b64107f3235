"""Rates and regret bounds of the tree of exponential weights, as plain formulas apart from money.

Source, where nothing else is said: Weed, Perchet, Rigollet, "Online learning in repeated
auctions", COLT 2016, section 4. Values and prices are shares of one scale, so regret is
in scales. `width` is the width of an interval of bids as a share of the range of bids: of
the last interval that holds a best fixed bid, unless a docstring says "narrowest". What is
said of the win-only variant is our own derivation, not published.
"""

from __future__ import annotations

import math
from collections.abc import Callable

Bound = Callable[[int, float], float]  # Rounds and width to what may be lost, in scales.
UNITS = 2**40  # Log-weights and chances are kept in whole parts of it.


def exptree_rate(rounds: float, width: float) -> float:
    """min{1, sqrt(ln(1/width) / (4T))}: Theorem 5, for a known number T of rounds."""
    return min(1.0, math.sqrt(-math.log(width) / (4.0 * rounds)))


def exptree_bound(rounds: float, width: float) -> float:
    """4 sqrt(T ln(1/width)): Theorem 5, at the rate of `exptree_rate`."""
    return 4.0 * math.sqrt(rounds * -math.log(width))


def exptree_bound_at(rate: float, rounds: float, width: float) -> float:
    """4 rate T + ln(1/width) / rate: the proof of Theorem 5, at any rate up to 1."""
    return 4.0 * rate * rounds - math.log(width) / rate


def exptree_bound_doubling(rounds: float, width: float) -> float:
    """48 sqrt(2T ln(1/width)), narrowest interval: Theorem 9, nothing known beforehand."""
    return 48.0 * math.sqrt(2.0 * rounds * -math.log(width))


def regret_floor(rounds: float, width: float) -> float:
    """
    sqrt(T floor(log2(1 / (2 width)))) / 32: Theorem 8, what any strategy loses somewhere.

    Args:
        rounds: Number T of rounds.
        width: Between 0 and 1/4.
    """
    return math.sqrt(rounds * math.floor(-math.log2(2.0 * width))) / 32.0


def regret_floor_one_price(rounds: float) -> float:
    """sqrt(T) / 32: Lemma 7, one price in [1/4, 3/4] and values near it on either side."""
    return math.sqrt(rounds) / 32.0


def win_only_rate(rounds: float, width: float) -> float:
    """
    min{1, sqrt(ln(1/width) / (2T))}, both the rate and the share of forced bids of the cap.

    Our own derivation, not published. It is the rate that makes `win_only_bound_at` least.
    """
    return min(1.0, math.sqrt(-math.log(width) / (2.0 * rounds)))


def win_only_bound(rounds: float, width: float) -> float:
    """2 sqrt(2T ln(1/width)) at the rate of `win_only_rate`; our own, not published."""
    return 2.0 * math.sqrt(2.0 * rounds * -math.log(width))


def win_only_bound_at(rate: float, rounds: float, width: float) -> float:
    """
    2 rate T + ln(1/width) / rate at any rate up to 1, for prices fixed beforehand.

    Our own derivation, not published. On a win at price m with chance P of a win, all bids
    above m are credited x = (v - m) / P. That is unbiased. P is at least the rate, so
    rate |x| <= 1 and e^y <= 1 + y + y^2 applies. With q the mass of the weights above m,
    E[q x^2] <= q / P <= 1. Forced bids cost at most the rate a round. Credits change only
    at prices, so they are alike on an interval between prices that holds a best bid.
    """
    return 2.0 * rate * rounds - math.log(width) / rate


def win_only_bound_doubling(rounds: int, width: float) -> float:
    """
    What the win-only variant may lose when it doubles as Theorem 9 does; narrowest interval.

    Our own derivation, not published. While T <= B and ln(1/width) <= D, powers of two, the
    rate min{1, sqrt(D / (2B))} loses at most 2 sqrt(2 B D). B D at least doubles from stage
    to stage, so the stages add up to a geometric sum, below (2 + sqrt 2) times its last
    term. Each doubling of D adds the one round that caused it.
    """
    by_rounds = math.ceil(math.log2(max(rounds, 1)))
    by_width = width_doublings(width)
    last = math.sqrt(2.0 ** (by_rounds + by_width))
    return 2.0 * math.sqrt(2.0) * (2.0 + math.sqrt(2.0)) * last + by_width


def width_doublings(width: float) -> int:
    """How often 1 must double to reach ln(1/width)."""
    doublings = 0
    while 2.0**doublings < -math.log(width):
        doublings += 1
    return doublings


def rounding_cost(rate: float, rounds: float, cells: int) -> float:
    """
    What keeping whole units of 2^-40 may add to a bound: (9 cells + 8 / rate) T 2^-40.

    Our own derivation. A lesson is off by less than 3 units on any cell, and by less than
    2^-50 of a credit that is large because its win had a small chance, which that chance
    makes less than one unit on average. That moves the best bid's log-weight and the log of
    the total by as much, each, and a bound is in log-weight over rate: 8 / rate. The law
    drawn from is the weights' law, rounded down to units with one unit added to each cell.
    It differs by at most one unit a cell, which costs that chance, and its chance of a win
    may be short by one part in (2^40 / cells), by which the 4 rate T of Theorem 5 grows: 9
    cells. The win-only variant loses less by each.
    """
    return (9.0 * cells + 8.0 / rate) * rounds / UNITS
