"""Discounting and windows against the formulas of Garivier, Moulines, ALT 2011.

"On Upper-Confidence Bound Policies for Switching Bandit Problems"; constants of gamma and tau
from memory. Values marked "computed from the formula" were computed apart from this code.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import drift

CLOSE = 1e-9


def test_discounted_sums_and_padding() -> None:
    """gamma = .9 on 1,0,0,1: N = 3.439, X = 1.729, mean 0.5027624309; padding with B = 1, xi = .6
    is 0.9284420183; computed from the formula."""
    known = amount = np.zeros(())
    for reward in (1, 0, 0, 1):
        known, amount = drift.discounted_step(known, amount, 1, reward, 0.9)

    assert (float(known), float(amount)) == pytest.approx((3.439, 1.729), abs=1e-14)
    assert float(amount / known) == pytest.approx(0.5027624309, abs=CLOSE)
    assert float(drift.discounted_padding(known, known)) == pytest.approx(0.9284420183, abs=CLOSE)


def test_a_round_without_value_still_forgets() -> None:
    """Three rounds not played leave gamma^3 of both sums, whatever reward is passed."""
    known, amount = np.asarray(2.0), np.asarray(1.0)
    for _ in range(3):
        known, amount = drift.discounted_step(known, amount, 0, 7.0, 0.5)

    assert (float(known), float(amount)) == (0.25, 0.125)


def test_parameters_for_a_horizon() -> None:
    """10,000 rounds, 4 changes, B = 1; computed from the formula."""
    gamma = drift.discount_factor(10_000, 4)

    assert float(gamma) == pytest.approx(0.995, abs=1e-15)
    assert float(drift.effective_size(gamma)) == pytest.approx(200, rel=1e-12)
    assert float(drift.window_length(10_000, 4)) == pytest.approx(303.4854259, abs=5e-8)


def test_without_change_nothing_is_forgotten() -> None:
    """No change expected: gamma is 1, its effective size and the window have no end."""
    assert float(drift.discount_factor(1000, 0)) == 1.0
    assert float(drift.effective_size(1.0)) == math.inf
    assert float(drift.window_length(1000, 0)) == math.inf


@pytest.mark.parametrize(("rounds", "window"), [(1000, 200), (200, 1000)])
def test_window_padding(rounds: int, window: int) -> None:
    """N = 50, xi = .6, B = 1, the smaller of t and tau is 200; computed from the formula."""
    padding = float(drift.window_padding(rounds, window, 50))

    assert padding == pytest.approx(0.2521503686, abs=CLOSE)
    assert float(drift.window_padding(rounds, window, 50, 0.6, 3.0)) == pytest.approx(3 * padding)


def test_nothing_known_is_infinitely_uncertain() -> None:
    """Both paddings are infinite without values, and finite for a fraction of one."""
    assert drift.window_padding(9, 5, [0.0, 0.1])[0] == math.inf
    assert drift.discounted_padding([0.0, 0.1], [0.0, 0.1]).tolist() == [math.inf, 0.0]


@given(some.floats(1.0, 1e4), some.sampled_from(["half_life", "effective", "window"]))
def test_weights_start_at_one_and_fall(size: float, kind: drift.Kind) -> None:
    """The newest bucket counts whole, older ones never more than newer ones."""
    found = drift.weights(np.arange(300), size, kind)

    assert found[0] == 1.0
    assert np.all(found[1:] <= found[:-1])
    assert np.all(found >= 0.0)


@pytest.mark.parametrize(
    ("kind", "expected"),
    [
        ("half_life", [1.0, 0.5, 0.25, 0.125]),
        ("effective", [1.0, 0.5625, 0.31640625, 0.177978515625]),
        ("window", [1.0, 1.0, 0.0, 0.0]),
    ],
)
def test_weights_of_size_four(kind: drift.Kind, expected: list[float]) -> None:
    """Ages 0, 2, 4, 6 in closed form; for a half-life of four each is halved twice as slowly."""
    ages = [0, 4, 8, 12] if kind == "half_life" else [0, 2, 4, 6]

    assert drift.weights(ages, 4.0, kind).tolist() == pytest.approx(expected, rel=1e-15)


@pytest.mark.parametrize("size", [1.0, 2.5, 200.0])
def test_effective_weights_sum_to_their_size(size: float) -> None:
    """gamma = 1 - 1 / size makes the weights of all rounds sum to the size."""
    found = drift.weights(np.arange(20_000), size, "effective")

    assert float(found.sum()) == pytest.approx(size, rel=1e-12)


@given(some.lists(some.tuples(some.booleans(), some.floats(0.0, 1.0)), min_size=1, max_size=40))
def test_bucket_weights_give_the_discounted_sums(rounds: list[tuple[bool, float]]) -> None:
    """A ring of one bucket per round, weighed when it is read, equals stepping each round."""
    known = amount = np.zeros(())
    for played, reward in rounds:
        known, amount = drift.discounted_step(known, amount, played, reward, 0.8)
    weight = drift.weights(np.arange(len(rounds))[::-1], 5.0, "effective")
    ring = np.array([[played, played * reward] for played, reward in rounds], dtype=np.float64)

    assert (weight @ ring).tolist() == pytest.approx([float(known), float(amount)], abs=1e-12)
