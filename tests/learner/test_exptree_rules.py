"""How much one lesson credits, against the published estimator and in exact arithmetic.

Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016, Algorithm 2 and
Theorem 9. The win-only variant is our own derivation, not published.
"""

from __future__ import annotations

import math
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.exptree_bounds import UNITS
from service.learner.exptree_rules import DOUBLINGS_MAX, FIRST, BadRules, Rules
from service.learner.partition import Ticks
from tests.learner.exptree_games import SCALE, nanos, rules

CELLS = 20
STAGES = some.tuples(some.integers(0, DOUBLINGS_MAX), some.integers(0, 6))


@pytest.mark.parametrize("win_only", [False, True])
@given(
    price=some.integers(0, SCALE - 1),
    value=some.integers(0, SCALE),
    chance=some.floats(2.0**-8, 1.0),
    rate=some.floats(1e-4, 1.0),
)
def test_a_win_and_its_value_credit_what_the_formula_says(
    win_only: bool, price: int, value: int, chance: float, rate: float
) -> None:
    """Within two units of exact arithmetic: 1 - (1 - (v - m)) / P, or (v - m) / P."""
    of = rules(CELLS, win_only, rate)
    gain, odds = Fraction(value - price, SCALE), Fraction(chance)
    credit = gain / odds if win_only else 1 - (1 - gain) / odds

    units = of.of_win(price, chance, FIRST) + of.of_value(value, chance, FIRST)
    assert abs(units - Fraction(rate) * credit * UNITS) < 2


@pytest.mark.parametrize("win_only", [False, True])
@given(price=some.integers(0, SCALE - 1), value=some.integers(0, SCALE), share=some.integers(1, 99))
def test_the_credit_is_unbiased(win_only: bool, price: int, value: int, share: int) -> None:
    """P times the credit of a win plus 1 - P times that of a loss is v - m, for any P."""
    of, chance = rules(CELLS, win_only, rate=1.0), share / 100
    won = of.of_win(price, chance, FIRST) + of.of_value(value, chance, FIRST)
    mean = chance * won + (1.0 - chance) * of.of_loss(FIRST)

    assert mean / UNITS == pytest.approx((value - price) / SCALE, abs=1e-9)


@given(
    stage=STAGES,
    price=some.integers(0, SCALE - 1),
    value=some.integers(0, SCALE),
    share=some.floats(0.0, 1.0),
)
def test_no_credit_is_larger_than_its_proof_allows(
    stage: tuple[int, int], price: int, value: int, share: float
) -> None:
    """
    At the rate r, ExpTree credits at most r; win-only moves at most 1 either way, because
    the chance is at least the forced one. Both are what makes e^x <= 1 + x + x^2 apply.
    """
    for win_only in (False, True):
        of = rules(CELLS, win_only)
        chance = max(of.forced_at(stage), 1e-6) + share * (1.0 - max(of.forced_at(stage), 1e-6))
        units = of.of_win(price, chance, stage) + of.of_value(value, chance, stage)
        assert units <= (UNITS if win_only else of.rate_at(stage) * UNITS) + 2
        assert not win_only or units >= -UNITS - 2


def test_a_loss_credits_one_in_the_published_tree_and_nothing_in_win_only() -> None:
    """Algorithm 2: +1 above the competing bid; the variant needs nothing of a loss."""
    assert rules(CELLS, win_only=False, rate=0.5).of_loss(FIRST) == UNITS // 2
    assert rules(CELLS, win_only=True, rate=0.5).of_loss(FIRST) == 0


@pytest.mark.parametrize(
    ("rounds", "stage"), [(0, 0), (1, 1), (2, 2), (3, 2), (4, 3), (7, 3), (8, 4), (1023, 10)]
)
def test_the_guess_of_rounds_doubles_when_it_is_passed(rounds: int, stage: int) -> None:
    """Theorem 9: the bound is the least power of two that round number `rounds` + 1 fits."""
    assert rules(CELLS, win_only=False).stage_due(rounds, CELLS) == (stage, 0)
    assert 2**stage >= rounds + 1 > (2**stage) // 2


@pytest.mark.parametrize(
    ("narrowest", "stage"), [(1000, 0), (368, 0), (367, 1), (136, 1), (135, 2), (19, 2), (1, 3)]
)
def test_the_guess_of_the_width_doubles_when_it_is_passed(narrowest: int, stage: int) -> None:
    """Theorem 9: of 1,000 cells, 368 are the last with ln(1/width) <= 1, and 136 with <= 2."""
    assert rules(1000, win_only=False).stage_due(0, narrowest) == (0, stage)


@pytest.mark.parametrize(
    ("stage", "tree", "win_only"),
    [
        ((0, 0), 0.5, math.sqrt(0.5)),
        ((1, 0), math.sqrt(0.125), 0.5),
        ((12, 2), 1 / 64, math.sqrt(0.5) / 32),
        ((0, 3), 1.0, 1.0),
    ],
)
def test_the_rate_of_a_stage(stage: tuple[int, int], tree: float, win_only: float) -> None:
    """min{1, sqrt(D / B) / 2}, Theorem 9; min{1, sqrt(D / (2B))}, our own, is forced too."""
    assert rules(CELLS, win_only=False).rate_at(stage) == pytest.approx(tree, rel=1e-15)
    assert rules(CELLS, win_only=True).rate_at(stage) == pytest.approx(win_only, rel=1e-15)
    assert rules(CELLS, win_only=False).forced_at(stage) == 0.0
    assert rules(CELLS, win_only=True).forced_at(stage) == pytest.approx(win_only, rel=1e-15)


def test_a_known_number_of_rounds_never_doubles() -> None:
    """With the rate given there is one stage, whatever comes."""
    of = rules(CELLS, win_only=True, rate=0.25)

    assert of.stage_due(10**9, 1) == FIRST
    assert of.rate_at((9, 3)) == of.forced_at((9, 3)) == 0.25


def test_the_scale_is_the_larger_of_cap_and_ceiling() -> None:
    """A value is cut at the ceiling, then both are shares of the larger one."""
    half = Ticks(nanos(0.5), nanos(0.1))
    low = Rules(half, nanos(2.0), win_only=True, rate=1.0)
    high = Rules(half, nanos(0.25), win_only=True, rate=1.0)

    assert (low.scale, high.scale) == (nanos(2.0), nanos(0.5))
    assert low.of_value(nanos(9.0), 1.0, FIRST) == UNITS
    assert high.of_value(nanos(9.0), 1.0, FIRST) == UNITS // 2
    assert low.of_win(nanos(0.5), 1.0, FIRST) == -UNITS // 4


@pytest.mark.parametrize("rate", [0.0, -0.5, 1.0001, math.nan, math.inf])
def test_a_rate_out_of_range_is_refused(rate: float) -> None:
    """The theorems hold for rates above 0 and up to 1."""
    with pytest.raises(BadRules):
        rules(CELLS, win_only=False, rate=rate)


@pytest.mark.parametrize("ceiling", [-1, 2**64])
def test_a_ceiling_out_of_range_is_refused(ceiling: int) -> None:
    """Below nothing, or more than a state has room for."""
    with pytest.raises(BadRules):
        Rules(Ticks(100, 10), ceiling, win_only=True)
