"""The ratio of values to hints: conjugate by hand, covering the truth, and worth its name.

The Gamma posterior of a Poisson rate is textbook: shape k + events, rate k / guess + exposure.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from scipy import stats

from service.learner import hints
from service.learner.hints import Hints, Prior, UnreadableHints, learn

EVENT = 2_000_000
PRIOR = Prior(EVENT)


def test_the_posterior_by_hand() -> None:
    """Three events of one size over hints worth ten, one event of prior at 1: Gamma(4, 11)."""
    seen = Hints(500, 10 * EVENT, 3 * EVENT, 3 * EVENT**2)

    assert hints.posterior(seen, PRIOR) == pytest.approx((4.0, 11.0), rel=1e-12)
    assert hints.ratio(seen, PRIOR) == pytest.approx(4 / 11, rel=1e-12)
    expected = stats.gamma(4, scale=1 / 11).ppf(0.75)
    assert hints.ratio_quantile(seen, PRIOR, 0.75) == pytest.approx(expected, rel=1e-9)


def test_before_anything_is_seen_the_prior_speaks() -> None:
    """With its ratio and its weight; hints alone, without value, pull it down."""
    guess = Prior(EVENT, events=4.0, ratio=0.5)
    assert hints.posterior(Hints(), guess) == pytest.approx((4.0, 8.0))
    assert hints.ratio(Hints(10, 8 * EVENT, 0, 0), guess) == pytest.approx(4 / 16)


def test_few_large_values_say_little() -> None:
    """The same sum in events of ten times the size counts as a tenth of the events."""
    small = hints.posterior(Hints(9, 10**9, 100 * EVENT, 100 * EVENT**2), PRIOR)
    large = hints.posterior(Hints(9, 10**9, 100 * EVENT, 1000 * EVENT**2), PRIOR)
    assert large[0] - 1 == pytest.approx((small[0] - 1) / 10, rel=0.1)


def test_a_correction_puts_one_value_in_place_of_another() -> None:
    """Sums are as if the later value had come at once."""
    first = learn(learn(Hints(), 70, 5), 30, 0)
    assert hints.correct(first, 5, 9) == learn(learn(Hints(), 30, 0), 70, 9)


def test_a_hint_is_calibrated_elementwise_and_never_below_nothing() -> None:
    """A caller's model may say less than nothing; a bid may not."""
    assert hints.calibrated([4.0, 0.0, -3.0], 0.5).tolist() == [2.0, 0.0, 0.0]


@pytest.mark.parametrize("truth", [0.3, 1.0, 4.0])
def test_the_interval_covers_the_true_ratio(truth: float) -> None:
    """Rare baskets of exponential size after lognormal hints: 90 % intervals in 85 % of runs."""
    rng = np.random.default_rng(17)
    covered = 0
    for _ in range(200):
        hinted = np.exp(rng.standard_normal(4000)) * EVENT / 50
        comes = rng.random(4000) < truth * hinted / EVENT
        values = np.where(comes, rng.exponential(EVENT, 4000), 0.0)
        seen = Hints(4000, int(hinted.sum()), int(values.sum()), int((values**2).sum()))
        low, high = (hints.ratio_quantile(seen, PRIOR, order) for order in (0.05, 0.95))
        covered += low < truth < high
    assert covered >= 170


@given(some.lists(some.tuples(some.integers(0, 2**60), some.integers(0, 2**60)), max_size=20))
def test_sums_are_equal_in_any_order_and_survive_their_bytes(seen: list[tuple[int, int]]) -> None:
    """To the byte; and the ratio is finite and above 0."""
    forward, backward = Hints(), Hints()
    for hint, value in seen:
        forward = learn(forward, hint, value)
    for hint, value in reversed(seen):
        backward = learn(backward, hint, value)
    assert forward.to_bytes() == backward.to_bytes()
    assert Hints.from_bytes(forward.to_bytes()) == forward
    assert 0.0 < hints.ratio(forward, PRIOR) < np.inf


def test_damaged_bytes_are_refused() -> None:
    """Each byte changed, and other lengths."""
    state = Hints(3, 9, 2, 4).to_bytes()
    spoilt = [state[:at] + bytes([state[at] ^ 4]) + state[at + 1 :] for at in range(len(state))]
    for wrong in (*spoilt, state[:-1], b"", state + b"\0"):
        with pytest.raises(UnreadableHints):
            Hints.from_bytes(wrong)
