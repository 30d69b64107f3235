"""Off-policy estimators: the worked example, and that they are right where they must be."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.rehearsal import off_policy

REWARDS = np.array([1.0, 1.0, 0.0, 0.0, 1.0])
LOGGED = np.array([0.5, 0.25, 0.5, 0.25, 0.8])
OTHER = np.array([0.25, 0.75, 0.25, 0.5, 0.4])
WEIGHTS = OTHER / LOGGED
MODEL_DONE = np.array([0.6, 0.5, 0.3, 0.2, 0.5])
MODEL_OTHER = np.array([0.4, 0.3, 0.4, 0.3, 0.45])


def test_the_worked_example() -> None:
    """Five rows: IPS 0.8, SNIPS 0.6153846154, DR 0.65, effective 3.072727273."""
    assert pytest.approx([0.5, 3, 0.5, 2, 0.5]) == WEIGHTS
    assert off_policy.ips(WEIGHTS, REWARDS).mean == pytest.approx(0.8)
    assert off_policy.ips(WEIGHTS, REWARDS).error == pytest.approx(0.561248608, rel=1e-9)
    assert off_policy.ips(WEIGHTS, REWARDS, most=2.0).mean == pytest.approx(0.6)
    assert off_policy.snips(WEIGHTS, REWARDS).mean == pytest.approx(0.6153846154, rel=1e-9)
    assert off_policy.effective(WEIGHTS) == pytest.approx(3.072727273, rel=1e-9)
    robust = off_policy.doubly_robust(WEIGHTS, REWARDS, MODEL_DONE, MODEL_OTHER)
    assert robust.mean == pytest.approx(0.65)
    # A model that is asked alone, without what was seen.
    alone = off_policy.doubly_robust(np.zeros(5), REWARDS, MODEL_DONE, MODEL_OTHER)
    assert alone.mean == pytest.approx(0.37)


def test_weights_of_one_are_the_plain_mean() -> None:
    """The alternative is what was done: all three agree, and all rows count."""
    ones = np.ones(5)
    for found in (
        off_policy.ips(ones, REWARDS),
        off_policy.snips(ones, REWARDS),
        off_policy.doubly_robust(ones, REWARDS, MODEL_DONE, MODEL_DONE),
    ):
        assert found.mean == pytest.approx(0.6)
    assert off_policy.effective(ones) == pytest.approx(5.0)
    low, high = off_policy.ips(ones, REWARDS).limits
    assert low < 0.6 < high


def test_no_rows_say_nothing() -> None:
    """No weight, no effective row, and no number that looks like one."""
    assert off_policy.effective([]) == off_policy.effective([0.0]) == 0.0
    assert math.isnan(off_policy.ips([], []).mean)
    assert math.isnan(off_policy.snips([0.0], [1.0]).mean)
    assert off_policy.ips([1.0], [1.0]).error == math.inf


def _drawn(rows: int, seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    action = (rng.random(rows) < 0.2).astype(int)
    reward = rng.normal(np.where(action == 1, 2.0, 1.0), 1.0)
    return action, reward, np.where(action == 1, 1.0 / 0.2, 0.0)


def test_all_three_find_the_mean_of_what_was_seldom_done() -> None:
    """Drawn with chance 0.2 and worth 2: each within five standard errors, none far off."""
    action, reward, weight = _drawn(40_000, 5)
    done, other = off_policy.folded_means(reward, action, np.ones(action.size))
    found = {
        "ips": off_policy.ips(weight, reward),
        "snips": off_policy.snips(weight, reward),
        "dr": off_policy.doubly_robust(weight, reward, done, other),
    }
    for estimate in found.values():
        assert abs(estimate.mean - 2.0) < 5.0 * estimate.error
        assert estimate.error < 0.05
    assert found["dr"].error < found["ips"].error
    assert off_policy.effective(weight) == pytest.approx(8000, rel=0.05)


def test_a_wrong_model_does_no_harm_and_neither_do_wrong_weights() -> None:
    """Doubly robust: one of the two being right is enough."""
    action, reward, weight = _drawn(40_000, 6)
    wrong = off_policy.doubly_robust(weight, reward, np.full(action.size, 9.0), np.full(40_000, 9))
    assert abs(wrong.mean - 2.0) < 5.0 * wrong.error
    right = np.where(action == 1, 2.0, 1.0)
    doubled = off_policy.doubly_robust(2.0 * weight, reward, right, np.full(action.size, 2.0))
    assert abs(doubled.mean - 2.0) < 5.0 * doubled.error


def test_no_row_is_its_own_witness() -> None:
    """The guess of a row comes from the other half, and of a cell nobody saw is nothing."""
    done, other = off_policy.folded_means([1.0, 3.0, 5.0, 7.0], [0, 0, 0, 1], [1, 1, 0, 2])
    assert done.tolist() == [3.0, 3.0, 3.0, 0.0]
    assert other.tolist() == [7.0, 0.0, 3.0, 0.0]


rewards = some.lists(some.floats(-100, 100), min_size=2, max_size=20)
weights = some.floats(0.01, 50)


@given(rewards, weights)
def test_alike_weights_tell_as_much_as_their_number(reward: list[float], weight: float) -> None:
    """Kish's number is that of the rows where all weigh the same, whatever they weigh."""
    alike = [weight] * len(reward)
    assert off_policy.effective(alike) == pytest.approx(len(reward))
    assert off_policy.snips(alike, reward).mean == pytest.approx(float(np.mean(reward)), abs=1e-9)


@given(some.lists(weights, min_size=1, max_size=20), some.floats(0.1, 9))
def test_the_effective_number_lies_between_one_and_all(each: list[float], factor: float) -> None:
    """By the inequality of Cauchy and Schwarz; a common factor changes nothing."""
    found = off_policy.effective(each)
    assert 1.0 - 1e-9 <= found <= len(each) + 1e-9
    assert off_policy.effective([factor * one for one in each]) == pytest.approx(found)


@given(rewards, some.floats(-50, 50))
def test_a_shift_of_rewards_shifts_the_self_normalized(reward: list[float], shift: float) -> None:
    """By just as much; the plain estimate is shifted by the mean weight times it."""
    each = [0.5 + at % 3 for at in range(len(reward))]
    moved = [one + shift for one in reward]
    plain, other = off_policy.snips(each, reward), off_policy.snips(each, moved)
    assert other.mean - plain.mean == pytest.approx(shift, abs=1e-9)
    assert other.error == pytest.approx(plain.error, abs=1e-9)
    gap = off_policy.ips(each, moved).mean - off_policy.ips(each, reward).mean
    assert gap == pytest.approx(shift * float(np.mean(each)), abs=1e-9)


@given(rewards)
def test_a_model_of_nothing_leaves_the_plain_estimate(reward: list[float]) -> None:
    """Doubly robust with guesses of 0 is inverse propensity weighting."""
    each = [0.5 + at % 3 for at in range(len(reward))]
    none = [0.0] * len(reward)
    assert off_policy.doubly_robust(each, reward, none, none) == off_policy.ips(each, reward)


@given(rewards, some.floats(0.1, 3))
def test_cutting_weights_lowers_rewards_above_nothing(reward: list[float], most: float) -> None:
    """Never raises them, and a cut above all weights changes nothing."""
    gains = [abs(one) for one in reward]
    each = [0.5 + at % 3 for at in range(len(reward))]
    assert off_policy.ips(each, gains, most).mean <= off_policy.ips(each, gains).mean + 1e-9
    assert off_policy.ips(each, gains, 3.0) == off_policy.ips(each, gains)


def test_limits_are_those_of_the_normal_law() -> None:
    """The mean and 1.96 standard errors to either side."""
    low, high = off_policy.Estimate(10.0, 2.0).limits
    assert (low, high) == pytest.approx((10 - 3.919928, 10 + 3.919928))


def test_one_row_has_no_error_that_could_be_believed() -> None:
    """Its limits are the whole line."""
    found = off_policy.ips([2.0], [3.0])
    assert (found.mean, found.error) == (6.0, float("inf"))
