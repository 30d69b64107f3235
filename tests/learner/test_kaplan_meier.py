"""Product-limit curves against a published study and against other programs' results.

Data: Freireich et al., "The effect of 6-mercaptopurine on the duration of steroid-induced
remissions in acute leukemia", Blood 21:699-716, 1963, the 6-MP arm. The table of survival and
Greenwood errors was computed by hand-written product-limit apart from this code; scipy 1.17
runs beside the code here; lifelines 0.30.3 `KaplanMeierFitter` and statsmodels 0.15.0 were run
once, as they bring many packages, and what they gave stands here.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from service.learner import kaplan_meier as km
from service.learner.arrays import Numbers

WEEKS = [6, 6, 6, 7, 10, 13, 16, 22, 23]
CENSORED = [6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35]
TABLE = [
    (6, 21, 0.8571428571, 0.07636035483),
    (7, 17, 0.8067226891, 0.08693528518),
    (10, 15, 0.7529411765, 0.09634965299),
    (13, 12, 0.6901960784, 0.1068147078),
    (16, 11, 0.6274509804, 0.1140538653),
    (22, 7, 0.5378151261, 0.1282337517),
    (23, 6, 0.4481792717, 0.1345914568),
]
LIFELINES_INTERVALS = [
    (6, 0.6197179552659838, 0.9515517476469969),
    (7, 0.5631465646222333, 0.9228090192028802),
    (10, 0.5031995107999564, 0.8893618351692651),
    (13, 0.4316102224861839, 0.8490659633494505),
    (16, 0.36751085598750194, 0.8049121894718411),
    (22, 0.26777893676713493, 0.7467907176353943),
    (23, 0.18805200595923233, 0.6801426284952412),
]
# Competing bids and bids drawn once; a loss saw the competing bid. lifelines gives F from 4 on.
COMPETING = [
    *(
        11,
        4,
        4,
        6,
        11,
        2,
        3,
        7,
        3,
        5,
        5,
        1,
        1,
        2,
        8,
        12,
        12,
        9,
        12,
        6,
        7,
        8,
        5,
        4,
        9,
        4,
        7,
        1,
        3,
        1,
    ),
    *(8, 10, 11, 10, 12, 1, 10, 4, 8, 2, 3, 6, 4, 8, 11, 7, 12, 2, 6, 9, 2, 8, 5, 6, 7, 4),
    *(9, 12, 2, 2),
]
BIDS = [
    *(4, 2, 5, 5, 3, 4, 4, 8, 10, 9, 2, 9, 8, 10, 3, 3, 1, 9, 5, 3, 8, 7, 7, 3, 2, 10, 5, 2, 11, 6),
    *(6, 8, 6, 9, 11, 2, 5, 12, 11, 4, 4, 6, 10, 4, 1, 1, 3, 3, 12, 4, 12, 7, 1, 1, 10, 12, 4, 3),
    *(7, 7),
]
LIFELINES_LEFT = [
    *(0.285991, 0.285991, 0.367703, 0.441243, 0.535795, 0.589375),
    *(0.707250, 0.771545, 0.828000, 0.900000, 1.000000),
]


def _counts(at: list[int], size: int = 40) -> Numbers:
    return np.bincount(at, minlength=size).astype(float)


REMISSION = km.kaplan_meier(_counts(WEEKS), _counts(CENSORED))


@pytest.mark.parametrize(("week", "at_risk", "share", "error"), TABLE)
def test_the_remission_table(week: int, at_risk: int, share: float, error: float) -> None:
    """At risk, survival and Greenwood's error of each week with an event, to ten digits."""
    assert REMISSION.at_risk[week] == at_risk
    assert REMISSION.share[week] == pytest.approx(share, abs=5e-11)
    assert km.greenwood_error(REMISSION)[week] == pytest.approx(error, rel=5e-10)


def test_the_median_remission() -> None:
    """23 weeks: the first at which no more than half remain."""
    assert int(np.argmax(REMISSION.share <= 0.5)) == 23


@pytest.mark.parametrize(("week", "low", "high"), LIFELINES_INTERVALS)
def test_log_log_intervals_are_those_of_lifelines(week: int, low: float, high: float) -> None:
    """Its default interval at 95 %, the exponential Greenwood one."""
    ours = km.log_log_interval(REMISSION, 0.95)
    assert (ours[0][week], ours[1][week]) == pytest.approx((low, high), abs=1e-12)


def test_the_plain_interval_of_week_ten() -> None:
    """The interval of Greenwood's error as it stands, 95 %."""
    low, high = km.plain_interval(REMISSION, 0.95)
    assert (low[10], high[10]) == pytest.approx((0.5640993267, 0.9417830263), abs=5e-11)


@pytest.mark.parametrize("method", ["linear", "log-log"])
def test_all_of_it_is_what_scipy_gives(method: str) -> None:
    """`scipy.stats.ecdf` on the censored data: survival and both kinds of interval."""
    data = stats.CensoredData(uncensored=WEEKS, right=CENSORED)
    theirs = stats.ecdf(data).sf
    ends = theirs.confidence_interval(method=method)
    at = theirs.quantiles.astype(int)
    ours = (km.plain_interval if method == "linear" else km.log_log_interval)(REMISSION, 0.95)
    assert REMISSION.share[at] == pytest.approx(theirs.probabilities, abs=1e-12)
    assert ours[0][at] == pytest.approx(ends.low.probabilities, abs=1e-12)
    assert ours[1][at] == pytest.approx(ends.high.probabilities, abs=1e-12)


@pytest.mark.parametrize("seed", range(5))
def test_drawn_auctions_give_what_scipy_gives(seed: int) -> None:
    """Second price with bids and competing bids in wild order, ties everywhere."""
    rng = np.random.default_rng(seed)
    competing, bids = rng.integers(0, 30, 200), rng.integers(0, 30, 200)
    won = competing <= bids
    seen, above = competing[won], bids[~won]
    ours = km.kaplan_meier(_counts(seen.tolist()), _counts(above.tolist()))
    theirs = stats.ecdf(stats.CensoredData(uncensored=seen, right=above)).sf
    at = theirs.quantiles.astype(int)
    assert ours.share[at] == pytest.approx(theirs.probabilities, abs=1e-12)


def test_reversed_counts_by_hand() -> None:
    """(1, below), (2, seen), (3, below), (4, seen), (5, seen): .8 on [4,5), .6 on [2,4), .3."""
    product = km.reverse_kaplan_meier(_counts([2, 4, 5], 7), _counts([1, 3], 7))
    assert product.share[1:6] == pytest.approx([0.3, 0.6, 0.6, 0.8, 1.0])


def test_reversed_counts_are_those_of_lifelines() -> None:
    """`fit_left_censoring` of lifelines on 60 drawn auctions, to the six digits it prints."""
    m, b = np.array(COMPETING), np.array(BIDS)
    seen, below = m[m > b], b[m <= b]
    product = km.reverse_kaplan_meier(_counts(seen.tolist(), 13), _counts(below.tolist(), 13))
    assert product.share[2:] == pytest.approx(LIFELINES_LEFT, abs=5e-7)


def test_without_an_event_the_interval_is_the_exact_one() -> None:
    """None of ten above: the lower end is 0.025^(1/10), by Clopper and Pearson."""
    product = km.kaplan_meier(_counts([], 5), _counts([4] * 10, 5))
    low, high = km.log_log_interval(product, 0.95)
    assert (low[2], high[2]) == pytest.approx((0.025**0.1, 1.0))


@pytest.mark.parametrize("seed", range(3))
def test_the_interval_covers(seed: int) -> None:
    """Of 400 markets at most one in ten has the true chance outside its 95 % interval."""
    rng = np.random.default_rng(seed)
    missed = 0
    for _ in range(400):
        competing, bids = rng.integers(0, 20, 150), rng.integers(0, 20, 150)
        won = competing <= bids
        counts = (_counts(competing[won].tolist(), 20), _counts(bids[~won].tolist(), 20))
        low, high = km.log_log_interval(km.kaplan_meier(*counts), 0.95)
        missed += not low[11] <= 8 / 20 <= high[11]
    assert 2 <= missed <= 40
