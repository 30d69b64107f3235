"""The invented markets have the means and medians they claim."""

from __future__ import annotations

import math

import numpy as np
import pytest

from service.rehearsal.market import (
    BasketValues,
    BernoulliValues,
    LognormalBids,
    Market,
    UniformBids,
    Values,
)

DRAWS = 200_000


@pytest.mark.parametrize(
    "values",
    [
        BernoulliValues(0.3, 10**9),
        BasketValues(0.2, 2 * 10**9, 50 * 10**9),
        BasketValues(0.2, 2 * 10**9, 10**9),
    ],
)
def test_values_have_their_mean(values: Values) -> None:
    """Within five standard errors of the mean in closed form."""
    drawn = values.draw(np.random.default_rng(5), DRAWS)
    error = drawn.std() / math.sqrt(DRAWS)

    assert abs(drawn.mean() - values.mean) < 5 * error


def test_baskets_are_cut_at_the_ceiling() -> None:
    """No value lies above the ceiling, and a low ceiling is often met."""
    drawn = BasketValues(1.0, 2 * 10**9, 10**9).draw(np.random.default_rng(5), DRAWS)

    assert drawn.max() == 10**9
    # An exponential of mean 2 exceeds 1 with probability exp(-1/2).
    assert np.mean(drawn == 10**9) == pytest.approx(math.exp(-0.5), abs=0.006)


def test_lognormal_bids_have_their_median_and_spread() -> None:
    """Half the bids lie below the median, and 84.13 % below e^sigma medians (normal table)."""
    drawn = LognormalBids(3_000_000, 0.8).draw(np.random.default_rng(5), DRAWS)

    assert np.mean(drawn <= 3_000_000) == pytest.approx(0.5, abs=0.006)
    assert np.mean(drawn <= 3_000_000 * math.exp(0.8)) == pytest.approx(0.8413, abs=0.005)


def test_uniform_bids_reach_both_ends() -> None:
    """Both ends are included, so a bid of the top always wins."""
    drawn = UniformBids(0, 3).draw(np.random.default_rng(5), 1000)

    assert set(drawn.tolist()) == {0, 1, 2, 3}


def test_a_path_is_a_function_of_its_seed() -> None:
    """The same seed gives the same opportunities, another seed others."""
    market = Market(UniformBids(0, 10**9), BernoulliValues(0.3, 10**9))
    one, again, other = (market.path(np.random.default_rng(seed), 50) for seed in (1, 1, 2))

    assert one.competing.tolist() == again.competing.tolist()
    assert one.values.tolist() == again.values.tolist()
    assert one.competing.tolist() != other.competing.tolist()
