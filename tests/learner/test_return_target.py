"""The return multiplier against worked figures, the strict form's promise, and the bytes.

Source: Feng, Padmanabhan, Wang, "Online Bidding Algorithms for Return-on-Spend Constrained
Advertisers", WWW 2023 (arXiv 2208.13713); the rule from memory, the figures computed apart
from this code.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.pacing import UNITS, units
from service.learner.return_target import (
    LEVEL_MAX,
    LEVEL_MIN,
    Return,
    Rules,
    UnreadableReturn,
    bid,
    learn,
    strict_bid,
)

SCALE = 10**9
ONE = Rules(1_000_000, units(0.1), SCALE)
TWO = replace(ONE, target=2_000_000)


def test_check_values_of_three_rounds() -> None:
    """Target 1, step 0.1, from lambda 1: three bids and multipliers to nine digits."""
    rounds = [
        (0.5, 0.7, 1.0, 1.02020134),
        (0.4, 0.1, 0.7920794693, 0.9900498337),
        (0.6, 0.9, 1.2060301, 1.02020134),
    ]
    state = Return()
    for value, price, expected, after in rounds:
        wanted = float(bid(value, state.multiplier, 0, ONE))
        assert wanted == pytest.approx(expected, rel=2e-9)
        assert wanted >= price
        state = learn(state, round(value * SCALE), round(price * SCALE), ONE)
        assert state.multiplier == pytest.approx(after, rel=2e-9)
    assert state.slack(ONE) == -round(0.2 * SCALE)


def test_check_values_of_the_bid() -> None:
    """With a budget multiplier, with another target, and where lambda has no end."""
    assert float(bid(0.6, 1.0, units(0.5), ONE)) == pytest.approx(0.8, rel=1e-10)
    assert float(bid(0.6, 1.0, 0, TWO)) == pytest.approx(0.9, rel=1e-10)
    assert float(bid(0.6, 1e9, 0, TWO)) == pytest.approx(0.3, rel=1e-8)


def test_bids_are_elementwise() -> None:
    """A rehearsal asks with all its values at once."""
    assert bid([0.3, 0.6], 1.0, 0, TWO) == pytest.approx([0.45, 0.9])


def test_lambda_stays_between_its_ends() -> None:
    """A long surplus or shortfall leaves it where it can come back from."""
    rich, poor = Return(), Return()
    for _ in range(100):
        rich, poor = learn(rich, 50 * SCALE, 0, ONE), learn(poor, 0, 50 * SCALE, ONE)
    assert (rich.level, poor.level) == (LEVEL_MIN, LEVEL_MAX)


def test_a_corrected_value_moves_lambda_back() -> None:
    """A value that comes late and is taken back leaves what was before."""
    state = learn(Return(), 0, SCALE // 2, TWO)
    there_and_back = learn(learn(state, SCALE, 0, TWO), -SCALE, 0, TWO)
    assert there_and_back.level == pytest.approx(state.level, abs=1)
    assert there_and_back.slack(TWO) == state.slack(TWO)


@given(
    target=some.integers(1, 10**9),
    rounds=some.lists(
        some.tuples(some.integers(0, 10**13), some.integers(0, 10**13), some.floats(0, 1)),
        max_size=40,
    ),
)
def test_the_strict_form_never_dips_below(
    target: int, rounds: list[tuple[int, int, float]]
) -> None:
    """Whatever comes, at any price up to the bid: value is at least target times what is paid."""
    rules = Rules(target, units(0.1), SCALE)
    state = Return()
    for value, rival, share in rounds:
        wanted = bid(value, state.multiplier, 0, rules)
        price = strict_bid(int(float(wanted)), value, state.slack(rules), 0, rules)
        if price >= rival:
            # From second price to first price, whatever the exchange charges.
            state = learn(state, value, rival + int((price - rival) * share), rules)
        assert state.slack(rules) >= 0
        assert state.valued * 1_000_000 >= target * state.paid


def test_without_the_strict_form_it_dips() -> None:
    """The first bid of the plain form may pay twice the value."""
    state = learn(Return(), SCALE // 2, round(0.7 * SCALE), ONE)
    assert state.slack(ONE) < 0
    # Bids below value / target then make up for it.
    assert strict_bid(SCALE, SCALE // 2, state.slack(ONE), 0, ONE) == round(0.3 * SCALE)


def test_open_bids_do_not_use_the_slack_twice() -> None:
    """What bids still open were given of it is held; nobody bids below nothing."""
    assert strict_bid(100, 10, 30, 0, ONE) == 40
    assert strict_bid(100, 11, 30, 0, TWO) == 35
    assert strict_bid(100, 10, 30, 30, ONE) == 10
    assert strict_bid(100, 10, 0, 30, ONE) == 0


@pytest.mark.parametrize("chance", [0.02, 1.0])
def test_it_comes_near_the_target_on_average(chance: float) -> None:
    """Values that come by chance, worth 0.3 on average: within 3 % of the target in 40,000."""
    rng = np.random.default_rng(3)
    rules, state = Rules(1_200_000, units(0.01), SCALE), Return()
    for rival, luck in rng.random((40_000, 2)):
        if float(bid(0.3, state.multiplier, 0, rules)) >= rival:
            value = round(0.3 / chance * SCALE) if luck < chance else 0
            state = learn(state, value, round(rival * SCALE), rules)
    assert state.valued / state.paid == pytest.approx(1.2, rel=0.03)


def test_a_return_survives_its_bytes() -> None:
    """And is refused under other rules or damaged."""
    state = Return(-(5 * UNITS), 2**62, 17)
    written = state.to_bytes(ONE)

    assert Return.from_bytes(written, ONE) == state
    for other in (TWO, replace(ONE, step=1), replace(ONE, scale=1)):
        with pytest.raises(UnreadableReturn, match="other rules"):
            Return.from_bytes(written, other)
    spoilt = [written[:at] + bytes([written[at] ^ 4]) + written[at + 1 :] for at in range(40)]
    for wrong in (*spoilt, written[:-1], b"", written + b"\0"):
        with pytest.raises(UnreadableReturn):
            Return.from_bytes(wrong, ONE)
