"""The hindsight programme: worked figures, a general solver, and brute force."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import pacing
from service.rehearsal import programme

VALUES = np.array([1.0, 0.8, 0.6, 0.5, 0.9])
PRICES = np.array([0.2, 0.4, 0.1, 0.45, 0.7])
BUDGET = 0.8

amounts = some.lists(some.tuples(some.integers(0, 50), some.integers(0, 30)), max_size=7)


@pytest.mark.parametrize("solve", [programme.by_greed, programme.by_solver])
def test_check_values_of_the_knapsack(solve: type) -> None:
    """Five opportunities and 0.8: surplus 1.728571429 at mu 0.2857142857; value 2.528571429."""
    surplus = solve(VALUES - PRICES, PRICES, BUDGET)
    value = solve(VALUES, PRICES, BUDGET)

    assert surplus.shares == pytest.approx([1, 1, 1, 0, 1 / 7], abs=1e-12)
    assert surplus.earned == pytest.approx(1.728571429, rel=1e-9)
    assert surplus.dual == pytest.approx(0.2857142857, rel=1e-9)
    assert value.earned == pytest.approx(2.528571429, rel=1e-9)
    assert value.dual == pytest.approx(1.285714286, rel=1e-9)
    assert surplus.spent == pytest.approx(BUDGET, rel=1e-12)


def test_the_best_whole_choice_earns_less() -> None:
    """1.7 by trying all 32."""
    every = [np.array(choice) for choice in product((0, 1), repeat=5)]
    earned = max((VALUES - PRICES) @ x for x in every if PRICES @ x <= BUDGET + 1e-12)
    assert earned == pytest.approx(1.7, rel=1e-12)


def test_the_dual_bid_needs_the_budget_clip() -> None:
    """Bidding value / (1 + mu) exactly wins the fifth whole too, and would spend 1.4."""
    dual = programme.by_greed(VALUES - PRICES, PRICES, BUDGET).dual
    bids = pacing.paced(VALUES, pacing.units(dual)) + 1e-9
    won = bids >= PRICES
    assert won.tolist() == [True, True, True, False, True]
    assert PRICES[won].sum() == pytest.approx(1.4)


def test_money_left_over_has_no_price() -> None:
    """With more than enough the dual is 0; with nothing it is the best gain per price."""
    rich = programme.by_greed([3.0, -1.0], [1.0, 2.0], 9.0)
    assert (rich.earned, rich.spent, rich.dual) == (3.0, 1.0, 0.0)
    assert programme.by_greed([3.0, 4.0], [1.0, 2.0], 0.0).dual == 3.0


@given(amounts, some.integers(0, 60))
def test_no_whole_choice_earns_more_and_a_part_more_is_at_most_one(
    rows: list[tuple[int, int]], budget: int
) -> None:
    """Against all choices; and at most one opportunity is won in part."""
    values, prices = (np.array([row[at] for row in rows], np.float64) for at in (0, 1))
    best = programme.by_greed(values - prices, prices, budget)
    every = (np.array(choice) for choice in product((0.0, 1.0), repeat=len(rows)))
    whole = max(float((values - prices) @ x) for x in every if prices @ x <= budget)

    assert best.earned >= whole - 1e-9
    assert best.spent <= budget + 1e-9
    assert int(((best.shares > 0.0) & (best.shares < 1.0)).sum()) <= 1


@pytest.mark.parametrize("share", [0.02, 0.2])
def test_for_value_alone_greed_and_the_solver_agree_to_ten_digits(share: float) -> None:
    """Whoever counts value and no cost until money ends: the dual is then value per price."""
    rng = np.random.default_rng(17)
    values, prices = rng.random(3000), rng.random(3000)
    greed = programme.by_greed(values, prices, share * 3000)
    solver = programme.by_solver(values, prices, share * 3000)
    for one, other in ((greed.earned, solver.earned), (greed.spent, solver.spent)):
        assert one == pytest.approx(other, rel=1e-10)
    assert greed.dual == pytest.approx(solver.dual, rel=1e-8)


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("share", [0.01, 0.1, 0.5])
def test_greed_and_the_solver_agree_to_ten_digits(seed: int, share: float) -> None:
    """Earned and spent, on 3,000 opportunities; the dual where money binds."""
    rng = np.random.default_rng(seed)
    values, prices = rng.random(3000), rng.random(3000)
    greed = programme.by_greed(values - prices, prices, share * 3000)
    solver = programme.by_solver(values - prices, prices, share * 3000)

    assert greed.earned == pytest.approx(solver.earned, rel=1e-10)
    assert greed.spent == pytest.approx(solver.spent, rel=1e-10)
    assert greed.dual == pytest.approx(solver.dual, rel=1e-8, abs=1e-8)
