"""Rates and bounds of the tree against values computed apart from this code, by the formula.

Source: Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016, section
4; theorem numbers beside each. What is said of the win-only variant is our own derivation,
not published. 10,000 rounds and a width of 0.001 where nothing else is said.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import exptree_bounds as bounds

ROUNDS, WIDTH = 10_000, 1e-3
CLOSE = 1e-9

RATES = some.floats(1e-6, 1.0)
WIDTHS = some.floats(1e-6, 0.9)
COUNTS = some.integers(1, 10**9)


@pytest.mark.parametrize(
    ("number", "value"),
    [
        (bounds.exptree_rate, 0.01314130442),  # Theorem 5
        (bounds.exptree_bound, 1051.304354),  # Theorem 5
        (bounds.regret_floor, 8.838834765),  # Theorem 8; floor(log2 500) = 8
        (bounds.win_only_rate, 0.01858461094),  # our own
        (bounds.win_only_bound, 743.3844378),  # our own
    ],
)
def test_check_values(number: Callable[[float, float], float], value: float) -> None:
    """Ten digits, by the formula of each docstring."""
    assert number(ROUNDS, WIDTH) == pytest.approx(value, rel=CLOSE)


@pytest.mark.parametrize(
    ("rounds", "width", "tree", "win_only"),
    [
        (4000, 0.05, 437.9, 309.6),
        (4000, 0.001, 664.9, 470.2),
        (4000, 0.5, 210.6, 148.9),
        (4000, 0.9, 82.1, 58.1),
    ],
)
def test_bounds_of_the_simulated_games(
    rounds: int, width: float, tree: float, win_only: float
) -> None:
    """The bounds of Theorem 5 and of our own that stand beside simulated regret, to 0.05."""
    assert bounds.exptree_bound(rounds, width) == pytest.approx(tree, abs=0.05)
    assert bounds.win_only_bound(rounds, width) == pytest.approx(win_only, abs=0.05)


def test_the_bound_for_nothing_known_beforehand() -> None:
    """48 sqrt(2 · 10,000 ln 1,000), Theorem 9."""
    assert bounds.exptree_bound_doubling(ROUNDS, WIDTH) == pytest.approx(
        12.0 * math.sqrt(2.0) * bounds.exptree_bound(ROUNDS, WIDTH), rel=CLOSE
    )
    assert bounds.exptree_bound_doubling(1, math.exp(-2)) == pytest.approx(96.0, rel=CLOSE)


def test_what_any_strategy_loses_at_one_price() -> None:
    """sqrt(T) / 32, Lemma 7."""
    assert bounds.regret_floor_one_price(ROUNDS) == pytest.approx(3.125, rel=CLOSE)


@given(COUNTS, WIDTHS)
def test_rates_are_where_the_bounds_at_any_rate_are_least(rounds: int, width: float) -> None:
    """Below 1 the rates of Theorem 5 and of our own give the bound, and no other rate less."""
    for rate, bound, at in (
        (bounds.exptree_rate, bounds.exptree_bound, bounds.exptree_bound_at),
        (bounds.win_only_rate, bounds.win_only_bound, bounds.win_only_bound_at),
    ):
        best, least = rate(rounds, width), bound(rounds, width)
        assert 0.0 < best <= 1.0
        assert best == 1.0 or at(best, rounds, width) == pytest.approx(least, rel=CLOSE)
        assert at(best / 2.0, rounds, width) >= at(best, rounds, width) * (1.0 - CLOSE)
        assert at(min(1.0, 2.0 * best), rounds, width) >= at(best, rounds, width) * (1.0 - CLOSE)


@given(some.floats(1e-6, 1.0))
def test_doublings_of_width_reach_it_and_no_further(width: float) -> None:
    """2^k is at least ln(1/width), and k is the least of them from 0 on."""
    doublings = bounds.width_doublings(width)

    assert 2.0**doublings >= -math.log(width)
    assert doublings == 0 or 2.0 ** (doublings - 1) < -math.log(width)


@given(some.integers(1, 10**6), some.floats(1e-6, 0.9))
def test_the_doubling_win_only_bound_covers_the_sum_of_its_stages(
    rounds: int, width: float
) -> None:
    """
    Each stage loses at most 2 sqrt(2 B D), and B D doubles from one to the next; one round
    more for each doubling of D. Our own derivation, added up apart from the code.
    """
    by_rounds, by_width = math.ceil(math.log2(rounds)), bounds.width_doublings(width)
    stages = range(by_rounds + by_width + 1)
    added = sum(2.0 * math.sqrt(2.0 * 2.0**stage) for stage in stages) + by_width

    assert added <= bounds.win_only_bound_doubling(rounds, width)


def test_the_doubling_win_only_bound() -> None:
    """2 sqrt(2) (2 + sqrt(2)) sqrt(4,096 · 4) + 2 for 4,000 rounds and a width of e^-4."""
    bound = bounds.win_only_bound_doubling(4000, math.exp(-4))

    assert bound == pytest.approx((4.0 * math.sqrt(2.0) + 4.0) * 128.0 + 2.0, rel=CLOSE)


def test_keeping_whole_units_costs_next_to_nothing() -> None:
    """(9 · 1,000 + 8 / 0.01) · 10,000 / 2^40 scales: less than a ten-thousandth."""
    cost = bounds.rounding_cost(0.01, ROUNDS, 1000)

    assert cost == pytest.approx(98_000_000 / 2**40, rel=CLOSE)
    assert cost < 1e-4
