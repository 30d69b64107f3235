"""The invented markets of the table of regret are what their descriptions say."""

from __future__ import annotations

import math

import numpy as np
import pytest

from service.rehearsal import worlds
from service.rehearsal.worlds import SCALE, STAGES, Drawn

ROUNDS = 40_000


def drawn(market: str, rounds: int = ROUNDS) -> Drawn:
    """One seeded run of a market."""
    return STAGES[market].draw(np.random.default_rng(3), rounds)


@pytest.mark.parametrize("market", STAGES)
def test_values_come_as_often_as_their_mean_says(market: str) -> None:
    """Hits less their chance are off by at most four standard errors, in either half."""
    one = drawn(market)
    for half in (slice(None, ROUNDS // 2), slice(ROUNDS // 2, None)):
        error = math.sqrt((one.worth[half] * (1.0 - one.worth[half])).sum())
        assert abs(one.hits[half].sum() - one.worth[half].sum()) <= 4.0 * error
    assert one.prices.min() >= 0.0
    assert one.prices.max() < 1.0


@pytest.mark.parametrize(
    ("market", "alpha"), [(worlds.STEEP, 0.5), (worlds.EVEN, 1.0), (worlds.FLAT, 2.0)]
)
@pytest.mark.parametrize("within", [0.07, 0.28])
def test_margins_are_what_their_names_say(market: str, alpha: float, within: float) -> None:
    """Half of a share (u / 0.7)^alpha of all prices lies less than u above the value."""
    above = drawn(market).prices - worlds.VALUE
    expected = 0.5 * (within / 0.7) ** alpha

    share = float(((above > 0.0) & (above <= within)).mean())
    assert share == pytest.approx(expected, abs=4.0 * math.sqrt(0.25 / ROUNDS))


def test_one_price_lies_where_both_terms_of_the_theorem_agree() -> None:
    """0.0743384438 above the value at 10,000 rounds: sqrt(6 ln T / T)."""
    prices = drawn(worlds.HOSTILE, 10_000).prices

    assert prices - worlds.VALUE == pytest.approx(0.07433844378, abs=1e-10)


def test_a_coin_is_good_at_the_low_price_and_worthless_at_the_high() -> None:
    """Proposition 11 of Weed, Perchet, Rigollet, COLT 2016, to the nano on its ticks."""
    for market, (low, high) in (
        (worlds.COIN_WIDE, worlds.WIDE),
        (worlds.COIN_NARROW, worlds.NARROW),
    ):
        ground = worlds.world([STAGES[market]], 500, 1, 7)
        prices, good = ground.competing[:, 0] - 1, ground.values[:, 0] > 0
        assert set(prices[good].tolist()) == {round(low * SCALE)}
        assert set(prices[~good].tolist()) == {round(high * SCALE)}
        assert SCALE % STAGES[market].cells == 0
        assert all(price % (SCALE // STAGES[market].cells) == 0 for price in prices.tolist())


def test_late_values_are_late_by_a_hundred_rounds_on_average() -> None:
    """Exponential, in whole rounds, never past the longest delay; at once everywhere else."""
    delays = drawn(worlds.LATE).delays

    assert float(delays.mean()) == pytest.approx(99.5, abs=4.0 * 100.0 / math.sqrt(ROUNDS))
    assert delays.max() <= worlds.DELAY_MAX
    assert not drawn(worlds.IID).delays.any()


def test_regret_is_nothing_for_the_best_bid_and_the_integral_for_another() -> None:
    """Uniform prices: a bid b loses (b - v)^2 / 2 scales a round, and the value itself nothing."""
    ground = worlds.world([STAGES[worlds.IID]], ROUNDS, 1, 7)
    for bid, expected in ((worlds.VALUE, 0.0), (0.5, 0.02), (0.0, 0.045)):
        lost = [ground.lost(turn, ground.competing[turn] <= bid * SCALE) for turn in range(ROUNDS)]
        assert float(np.mean(lost)) / SCALE == pytest.approx(expected, abs=0.002)
        assert float(np.min(lost)) >= 0.0


def test_a_run_is_the_same_in_any_arena() -> None:
    """Trees play the first runs of the very sequences that the others play."""
    all_runs = worlds.world(list(STAGES.values()), 300, 3, 7)
    alone = worlds.world([STAGES[worlds.ABRUPT]], 300, 2, 7)
    first = 3 * list(STAGES).index(worlds.ABRUPT)

    assert np.array_equal(all_runs.competing[:, first : first + 2], alone.competing)
    assert np.array_equal(all_runs.values[:, first : first + 2], alone.values)
    assert not np.array_equal(alone.values[:, 0], alone.values[:, 1])
