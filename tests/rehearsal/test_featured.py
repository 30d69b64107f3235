"""Where features matter, learning from them beats not looking, and regret grows slower than √T."""

from __future__ import annotations

import numpy as np
import pytest

from service.rehearsal.featured import Featured, Regret, exponent

ROUNDS = 2**15


@pytest.fixture(name="regret", scope="module")
def _regret() -> Regret:
    return Featured().play(np.random.default_rng(1), ROUNDS)


def test_regret_grows_no_faster_than_the_root(regret: Regret) -> None:
    """The fitted exponent over doublings from 1,024 rounds is at most one half."""
    assert 0.2 < exponent(regret.linear, 1024) <= 0.5


def test_without_features_regret_grows_like_the_rounds(regret: Regret) -> None:
    """One value for all impressions loses the same on every one."""
    assert exponent(regret.featureless, 1024) > 0.85


def test_features_earn_more_where_they_matter(regret: Regret) -> None:
    """After 32,768 rounds less than half is lost; at first the ellipsoid costs more."""
    assert regret.linear[-1] < 0.5 * regret.featureless[-1]
    assert regret.linear[1023] > regret.featureless[1023]


@pytest.mark.parametrize("power", [0.3, 0.5, 1.0])
def test_the_exponent_is_that_of_a_power(power: float) -> None:
    """Fitted on the power itself."""
    assert exponent(np.arange(1.0, 5000.0) ** power, 64) == pytest.approx(power)
