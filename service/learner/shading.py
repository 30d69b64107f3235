"""First-price bids: what to offer when one pays what one bids, apart from how the curve is known.

A bid b at value v earns (v - b) F(b), F(b) being its chance to win. Everything is elementwise
over values. Money is in any one unit; `cost` is what a won bid costs, fees included.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from service.learner.arrays import Numbers, double, doubles
from service.learner.bounds import kl_upper

Places = NDArray[np.intp]
Bound = Literal["ucb1", "kl"]

GRID_POINTS = 257
NARROWINGS = 40
GOLDEN = (5.0**0.5 - 1.0) / 2.0


class Choice(NamedTuple):
    """
    The best of a grid of bids for each value.

    Args:
        place: Its place in the grid, -1 where no bid costs less than the value.
        surplus: What it is thought to earn, 0 where there is none.
    """

    place: Places
    surplus: Numbers


def best(cost: ArrayLike, chance: ArrayLike, values: ArrayLike) -> Choice:
    """
    The bid that maximises (v - cost) F, of equals the lowest; bids at or above v are never made.

    The product may have several tops, so all bids are looked at.

    Args:
        cost: What a won bid of each place costs, ascending.
        chance: Its chance to win, or an upper end of it.
        values: What is bid for; any shape.
    """
    c, f, v = doubles(cost, chance, values)
    earned = np.where(c < v[..., None], (v[..., None] - c) * f, -np.inf)
    place = np.argmax(earned, axis=-1)
    top = np.take_along_axis(earned, place[..., None], axis=-1)[..., 0]
    some = np.isfinite(top)
    return Choice(np.where(some, place, -1), np.where(some, top, 0.0))


def refined(win: Callable[[Numbers], Numbers], value: float, top: float) -> float:
    """
    The bid in [0, min(value, top)] that maximises (value - b) F(b) for a smooth F.

    First on a grid, since there may be several tops, then by golden section beside the best.

    Args:
        win: F, elementwise.
        value: What is bid for.
        top: Largest bid allowed.
    """
    grid = np.linspace(0.0, min(value, top), GRID_POINTS)
    at = int(np.argmax((value - grid) * win(grid)))
    low, high = float(grid[max(at - 1, 0)]), float(grid[min(at + 1, GRID_POINTS - 1)])
    for _ in range(NARROWINGS):
        inner = np.array([high - GOLDEN * (high - low), low + GOLDEN * (high - low)])
        left, right = ((value - inner) * win(inner)).tolist()
        low, high = (low, float(inner[1])) if left >= right else (float(inner[0]), high)
    return 0.5 * (low + high)


def uniform_bid(value: ArrayLike) -> Numbers:
    """v / 2 against one rival whose bid is uniform from 0 on (Krishna, "Auction Theory")."""
    return double(value) / 2.0


def power_bid(value: ArrayLike, bidders: ArrayLike) -> Numbers:
    """
    v (n - 1) / n against F = b^(n-1), n - 1 rivals with uniform bids.

    Also the equilibrium of n bidders with uniform values without reserve (Krishna, "Auction
    Theory").
    """
    v, n = doubles(value, bidders)
    return double(v * (n - 1.0) / n)


def exponential_bid(value: ArrayLike, rate: ArrayLike) -> Numbers:
    """
    (1 + kv - W(e^(1 + kv))) / k against F = 1 - e^(-kb), W being Lambert's.

    From the first-order condition (v - b) f(b) = F(b). W(e^z) is Wright's omega of z, which
    does not overflow.
    """
    v, k = doubles(value, rate)
    z = 1.0 + k * v
    return double((z - special.wrightomega(z)) / k)


def reserve_bid(value: ArrayLike, reserve: ArrayLike) -> Numbers:
    """v/2 + r^2 / (2v) from r on: two bidders, uniform values, reserve r (Krishna)."""
    v, r = doubles(value, reserve)
    return double(v / 2.0 + r * r / (2.0 * v))


def equilibrium_revenue(bidders: ArrayLike, reserve: ArrayLike = 0.0) -> Numbers:
    """
    (2n / (n + 1)) (1 - r^(n+1)) - (1 - r^n): the seller's mean revenue in either format.

    n bidders with independent uniform values and a reserve r (Krishna, "Auction Theory");
    (n - 1) / (n + 1) without one.
    """
    n, r = doubles(bidders, reserve)
    return double(2.0 * n / (n + 1.0) * (1.0 - r ** (n + 1.0)) - (1.0 - r**n))


def cross_learning_index(
    cost: ArrayLike, wins: ArrayLike, trials: ArrayLike, value: float, rounds: float
) -> Numbers:
    """
    (v - b) min{1, w / n + sqrt(2 ln t / n)} for each bid of a grid; 0 for bids not below v.

    UCB1 with cross-learning: Balseiro, Golrezaei, Mahdian, Mirrokni, Schneider, "Contextual
    bandits with cross-learning", NeurIPS 2019, here for a first price (from memory). What a bid
    wins against does not depend on our value, so one pair of counts per bid serves every value.

    Args:
        cost: The bids.
        wins: Number w of wins at each.
        trials: Number n of rounds each was bid.
        value: What is bid for.
        rounds: Number t of the round.
    """
    c = double(cost)
    return np.where(c < value, (value - c) * chance_upper(wins, trials, rounds, "ucb1"), 0.0)


def chance_upper(wins: ArrayLike, trials: ArrayLike, rounds: float, bound: Bound) -> Numbers:
    """
    The upper end of the chance to win at each bid of a grid; 1 where nothing was tried.

    Args:
        wins: Wins at each bid; may be fractions.
        trials: Rounds each was bid.
        rounds: Number t of the round.
        bound: "ucb1", sqrt(2 ln t / n) above the rate; or "kl", the largest q with
            kl(rate, q) <= ln t / n (Garivier, Cappé, COLT 2011), never above the other.
    """
    w, n = doubles(wins, trials)
    some = np.where(n > 0.0, n, 1.0)
    log = np.log(max(rounds, 1.0))
    if bound == "ucb1":
        upper = np.minimum(w / some + np.sqrt(2.0 * log / some), 1.0)
    else:
        upper = kl_upper(np.minimum(w / some, 1.0), log / some)
    return np.where(n > 0.0, upper, 1.0)


def rising_upper(wins: ArrayLike, trials: ArrayLike, rounds: float, bound: Bound = "kl") -> Numbers:
    """
    Upper ends that use that a higher bid wins more often; O(bids tried, squared).

    The wins of a bid and of those above it, up to any, bound its own chance from above, and the
    lowest such end holds. So a low bid is not tried where higher ones are known to lose, and
    bids never tried are climbed from below, a step at a time: exploring costs auctions lost,
    not prices too high. Sharing strength so is our own addition, without a published bound.

    Args:
        wins: Wins at each bid, ascending; may be fractions.
        trials: Rounds each was bid.
        rounds: Number t of the round.
        bound: As for `chance_upper`.
    """
    w, n = doubles(wins, trials)
    tried = np.flatnonzero(n > 0.0)
    upper = np.ones(n.size)
    if tried.size:
        from_each, up_to = np.triu_indices(tried.size)
        won, made = (np.append(0.0, np.cumsum(one[tried])) for one in (w, n))
        runs_won, runs_made = (one[up_to + 1] - one[from_each] for one in (won, made))
        ends = chance_upper(runs_won, runs_made, rounds, bound)
        # Unbuffered, since several runs begin at one bid: plain indexing would keep the last.
        np.minimum.at(upper, tried[from_each], ends)
    return double(np.minimum.accumulate(upper[::-1])[::-1])


def level_at(rounds: float) -> float:
    """1 - 1/t, at least 1/2: the level of a curve whose upper ends are bid by in round t."""
    return max(1.0 - 1.0 / max(rounds, 1.0), 0.5)


def exploring_places(cells: int, count: int) -> Places:
    """
    At most `count` places spread evenly from 1 to `cells`, the last among them.

    Where only win and loss are told every bid has to be tried; T^(1/3) of them for T rounds
    balance what the grid misses against what trying costs (Balseiro et al., NeurIPS 2019).
    """
    return np.unique(np.round(np.arange(1, count + 1) * cells / count).astype(np.intp).clip(1))
