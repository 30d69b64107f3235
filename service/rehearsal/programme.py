"""What a budget could have earned in hindsight: a linear programme, solved two ways.

Apart from `hindsight`, which asks for one bid; this asks for the best choice of wins, a part of
a win included, that no bidder who sees opportunities one by one can beat.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy import optimize

from service.learner.arrays import Numbers, double, doubles


@dataclass(frozen=True, slots=True)
class Chosen:
    """
    Which opportunities to win, and what that comes to; in the unit of what was given.

    Args:
        shares: How much of each opportunity is won, between 0 and 1.
        earned: What was to be made large, over the shares.
        spent: Prices over the shares.
        dual: What one more unit of budget would earn; the multiplier mu of the best bid, value
            / (1 + mu) for surplus and value / mu for value.
    """

    shares: Numbers
    earned: float
    spent: float
    dual: float


def by_greed(gains: ArrayLike, prices: ArrayLike, budget: float) -> Chosen:
    """
    Win by gain per price, the best first, until money or gains end; the last one in part.

    This is the fractional knapsack, exact for this programme (Dantzig, "Discrete-Variable
    Extremum Problems", Operations Research 5(2):266-288, 1957).

    Args:
        gains: What winning each opportunity earns: value - price for surplus, value for value.
        prices: What winning each costs, at least 0.
        budget: Money for all.
    """
    gain, price = doubles(gains, prices)
    per_price = np.divide(gain, price, out=np.full(gain.shape, np.inf), where=price > 0.0)
    order = np.argsort(-per_price, kind="stable")
    order = order[gain[order] > 0.0]
    before = np.cumsum(price[order]) - price[order]
    room = np.where(price[order] > 0.0, price[order], 1.0)
    shares = np.zeros(gain.shape)
    shares[order] = np.clip((budget - before) / room, 0.0, 1.0)
    # What costs nothing is won whatever the money.
    shares[order[price[order] == 0.0]] = 1.0
    missed = order[shares[order] < 1.0]
    dual = float(per_price[missed[0]]) if missed.size else 0.0
    return Chosen(shares, float(gain @ shares), float(price @ shares), dual)


def by_solver(gains: ArrayLike, prices: ArrayLike, budget: float) -> Chosen:
    """
    The same by a general solver of linear programmes (HiGHS, in scipy), which knows no greed.

    Arguments as for `by_greed`.

    Raises:
        RuntimeError: The solver found no answer.
    """
    gain, price = doubles(gains, prices)
    # With one row there is nothing to prepare, and preparing takes a minute for 100,000 columns.
    solved = optimize.linprog(
        -gain,
        A_ub=price[np.newaxis, :],
        b_ub=[budget],
        bounds=(0.0, 1.0),
        method="highs-ds",
        options={"presolve": False},
    )
    if not solved.success:
        raise RuntimeError(f"no answer from the solver: {solved.message}")
    shares = double(solved.x)
    dual = -float(solved.ineqlin.marginals[0])
    return Chosen(shares, float(gain @ shares), float(price @ shares), dual)
