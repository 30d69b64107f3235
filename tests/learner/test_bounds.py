"""Index formulas against published check values, closed forms and an independent root finder.

Sources: Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016; Achddou,
Cappé, Garivier, "Efficient Algorithms for Stochastic Repeated Second-price Auctions", ALT
2021. Values marked "by the formula" were computed apart from this code from the published
formula; no table of them is published.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from scipy.optimize import brentq

from service.learner import bounds

CLOSE = 1e-9


def test_ucbid_bonus() -> None:
    """sqrt(3 ln 100 / 20), by the formula of Weed, Perchet, Rigollet, Algorithm 1."""
    assert float(bounds.ucbid_bonus(100, 10, 3.0)) == pytest.approx(0.8311290681, abs=CLOSE)


@pytest.mark.parametrize(
    ("mean", "rounds", "known", "gamma", "bid"),
    [
        (0.1, 1000, 50, 3.0, 0.5552281388),
        (0.2, 4, 3, 3.0, 1.0),
        (0.2, 5, 4, 3.0, 0.976877865),
        (0.02, 1000, 50, 1.0, 0.2828260885),
    ],
)
def test_ucbid_bid(mean: float, rounds: int, known: int, gamma: float, bid: float) -> None:
    """UCBid bids, by the formula of Weed, Perchet, Rigollet, Algorithm 1."""
    index = bounds.ucbid_index(mean, rounds, known, gamma)

    assert float(index) == pytest.approx(bid, abs=CLOSE)


def test_ucbid_before_clipping() -> None:
    """At t = 4 with mean 0.2 the sum is still 1.032554611, by the formula; the bid is 1."""
    assert 0.2 + float(bounds.ucbid_bonus(4, 3, 3.0)) == pytest.approx(1.032554611, abs=CLOSE)


@pytest.mark.parametrize(
    ("gap", "bound"),
    [
        (0.5, 224.0481689),
        (None, 3 + 1486.768876),
        (0.07433844378, 3 + 1486.768876),
        (1e-6, 3 + 1486.768876),
    ],
)
def test_theorem_1(gap: float | None, bound: float) -> None:
    """Weed, Perchet, Rigollet, Theorem 1 at T = 10,000; the third gap is where both terms meet."""
    assert float(bounds.ucbid_regret_bound(10_000, gap)) == pytest.approx(bound, rel=1e-8)


@pytest.mark.parametrize(
    ("mean", "index"),
    [(0.2, 0.4505799205), (0.02, 0.186797496), (0.0, 0.12903641)],
)
def test_kl_ucbid_bid(mean: float, index: float) -> None:
    """klUCBid at N = 50, t = 1000, gamma = 1, by the formula of Achddou, Cappé, Garivier."""
    assert float(bounds.kl_ucbid_index(mean, 1000, 50, 1.0)) == pytest.approx(index, abs=CLOSE)


@pytest.mark.parametrize(
    ("mean", "divergence", "root"),
    [
        (0.1, 0.2, 0.3783915488),
        (0.5, 0.2, 0.7870888164),
        (0.9, 0.2, 0.9944894894),
    ],
)
def test_kl_roots(mean: float, divergence: float, root: float) -> None:
    """Roots of kl(mean, x) = d, by the definition of the divergence."""
    assert float(bounds.kl_upper(mean, divergence)) == pytest.approx(root, abs=CLOSE)


@pytest.mark.parametrize(
    ("mean", "divergence", "printed"),
    [
        (0.1, 0.2, 0.378391),
        (0.5, 0.2, 0.787088),
        (0.9, 0.2, 0.994489),
        (0.1, 0.4, 0.519475),
        (0.1, 0.9, 0.734714),
        (0.5, 0.4, 0.871035),
        (0.5, 0.9, 0.956809),
        (0.9, 0.4, 0.999285),
        (0.9, 0.9, 0.999995),
    ],
)
def test_kl_roots_another_library_prints(mean: float, divergence: float, printed: float) -> None:
    """The nine roots in the doctests of klucbBern in SMPyBandits 0.9.7, cut at six digits."""
    assert float(bounds.kl_upper(mean, divergence)) == pytest.approx(printed, abs=2e-6)


@given(some.floats(-9.0, 0.0), some.booleans(), some.floats(-6.0, 2.0))
def test_kl_roots_by_another_root_finder(small: float, mirrored: bool, size: float) -> None:
    """Brent's method on the same divergence finds the same root to 1e-12 or its own rounding."""
    mean, divergence = math.pow(10.0, small), math.pow(10.0, size)
    mean = 1.0 - mean if mirrored else mean
    index = float(bounds.kl_upper(mean, divergence))
    top = 1.0 - 2.0**-53

    def excess(x: float) -> float:
        return float(bounds.kl(mean, x)) - divergence

    if mean >= top or excess(top) < 0.0:
        assert index == pytest.approx(1.0, abs=1e-12)
        return
    root = float(brentq(excess, mean, top, xtol=1e-15, rtol=1e-14))
    steepness = (root - mean) / (root * (1.0 - root))
    assert index == pytest.approx(root, abs=1e-12 + 4e-16 / steepness)


@given(some.floats(0.0, 1.0), some.floats(0.0, 800.0))
def test_kl_roots_stay_between_the_mean_and_one(mean: float, divergence: float) -> None:
    """The index is finite, never below the mean and never above one."""
    index = float(bounds.kl_upper(mean, divergence))

    assert mean <= index <= 1.0


def test_kl_root_of_mean_zero_is_in_closed_form() -> None:
    """At mean 0 the root of -ln(1 - x) = d is 1 - exp(-d)."""
    assert float(bounds.kl_upper(0.0, 0.25)) == pytest.approx(1.0 - math.exp(-0.25), abs=1e-15)


def test_kl_itself() -> None:
    """kl(1/2, 1/4) = ln 2 / 2 + ln(2/3) / 2 = ln(4/3) / 2, in closed form."""
    assert float(bounds.kl(0.5, 0.25)) == pytest.approx(0.5 * math.log(4.0 / 3.0), abs=1e-15)


@pytest.mark.parametrize("index", [bounds.ucbid_index, bounds.kl_ucbid_index])
def test_nothing_known_bids_one(index: Callable[..., bounds.Numbers]) -> None:
    """Before the first value both published rules bid the top of the scale."""
    assert float(index(0.0, 1, 0, 3.0)) == 1.0


def test_one_number_and_an_array_get_the_same_index() -> None:
    """A rehearsal over arrays and the service over single numbers share every digit."""
    means = np.array([0.0, 1e-6, 0.2, 0.7, 1.0])
    known = np.array([0.0, 3.0, 50.0, 10.0, 4.0])

    for index in (bounds.ucbid_index, bounds.kl_ucbid_index):
        together = index(means, 1000, known, 1.01)
        alone = [float(index(mean, 1000, n, 1.01)) for mean, n in zip(means, known, strict=True)]
        assert together.tolist() == pytest.approx(alone, rel=1e-15)


@pytest.mark.parametrize(
    ("order", "degrees", "printed"),
    [
        (0.95, 1, 3.841),
        (0.95, 2, 5.991),
        (0.95, 10, 18.307),
        (0.95, 20, 31.410),
        (0.99, 10, 23.209),
        (0.975, 10, 20.483),
        (0.75, 1, 1.323),
        (0.75, 2, 2.773),
        (0.75, 4, 5.385),
        (0.75, 10, 12.549),
        (0.75, 20, 23.828),
    ],
)
def test_gamma_quantile_by_the_chi_square_table(order: float, degrees: int, printed: float) -> None:
    """Chi-square is Gamma(df/2, 1/2); printed tables (from memory, as in the NIST handbook)."""
    quantile = float(bounds.gamma_quantile(degrees / 2.0, 0.5, order))

    assert quantile == pytest.approx(printed, abs=5.1e-4)


@given(some.floats(0.001, 0.999), some.floats(1e-9, 1e9))
def test_gamma_quantile_of_shape_one(order: float, rate: float) -> None:
    """Shape one is the exponential distribution: -ln(1 - order) / rate."""
    quantile = float(bounds.gamma_quantile(1.0, rate, order))

    assert quantile == pytest.approx(-math.log1p(-order) / rate, rel=1e-12)


def test_one_number_gives_the_bits_that_many_give() -> None:
    """Over means from nought to one and divergences from nothing to far beyond the ceiling."""
    edges = [0.0, 1e-300, 1e-200, 1e-12, 0.5, 1.0 - 1e-12, 1.0 - 2.0**-53, 1.0, 1.5]
    rng = np.random.default_rng(5)
    means = [*edges, *rng.random(150), *10.0 ** rng.uniform(-15, 0, 100)]
    divergences = [-1.0, 0.0, 1e-300, 1e-16, 700.0, 1e300, *10.0 ** rng.uniform(-9, 3, 40)]
    p, d = (one.ravel() for one in np.meshgrid(means, divergences))
    with np.errstate(all="ignore"):
        many = bounds.kl_upper(p, d).tolist()
        single = [
            bounds.kl_upper_single(*pair) for pair in zip(p.tolist(), d.tolist(), strict=True)
        ]

    assert single == many


def test_one_line_item_gets_the_index_that_a_row_of_runs_gets() -> None:
    """Also before the first value, and with a part of one known."""
    rng = np.random.default_rng(6)
    means, rounds = rng.random(500), 1.0 + rng.integers(0, 10**6, 500)
    known = np.where(rng.random(500) < 0.2, 0.0, rounds * rng.random(500))
    many = bounds.kl_ucbid_index(means, rounds, known, 1.01).tolist()
    rows = zip(means, rounds, known, strict=True)
    single = [float(bounds.kl_ucbid_index(*row, 1.01)) for row in rows]

    assert single == many
