"""Markets drawn before anybody bids: moments, floors, courses of value, late and lost news."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.rehearsal.grounds import (
    GROUNDS,
    Ground,
    delays,
    ground,
    is_at_once,
    known_before,
    mean_worth,
    moments,
    told,
)
from tests.rehearsal.orders import SCALE, market

EVEN = {"law": "even", "low": 0, "high": SCALE}
COLUMNS = ("at_ms", "least", "values", "worth")


def drawn(rounds: int = 400, seed: int = 3, **changes: Any) -> Ground:
    """A market with these changes, drawn from a seed."""
    return ground(market(**changes), np.random.default_rng(seed), rounds)


@pytest.mark.parametrize("kind", sorted(GROUNDS))
def test_every_market_is_drawn_again_from_its_seed(kind: str) -> None:
    """The same seed gives the same auctions to the nano, another seed others."""
    first, again, other = (drawn(kind=kind, seed=seed) for seed in (1, 1, 2))
    for name in COLUMNS:
        assert np.array_equal(getattr(first, name), getattr(again, name)), name
    assert not np.array_equal(first.values, other.values)


@pytest.mark.parametrize("kind", sorted(GROUNDS))
@pytest.mark.parametrize("floor", [0, SCALE // 3, SCALE])
def test_no_bid_below_the_floor_wins(kind: str, floor: int) -> None:
    """The least bid that wins includes the floor, and a higher floor leaves values as they are."""
    plain, raised = drawn(kind=kind), drawn(kind=kind, floor=floor)
    assert np.array_equal(raised.least, np.maximum(plain.least, floor))
    assert np.array_equal(raised.values, plain.values)


@pytest.mark.parametrize("kind", sorted(GROUNDS))
def test_columns_and_auctions_say_the_same(kind: str) -> None:
    """One by one or in columns: the same moments, prices, values and floor."""
    found = drawn(kind=kind, rounds=50, floor=SCALE // 5)
    auctions = found.auctions()
    assert len(auctions) == 50
    assert [one.at_ms for one in auctions] == found.at_ms.tolist()
    assert [one.least for one in auctions] == found.least.tolist()
    assert [one.value for one in auctions] == found.values.tolist()
    assert [one.worth for one in auctions] == found.worth.tolist()
    assert {(one.floor, one.hint, one.told) for one in auctions} == {(SCALE // 5, None, True)}


@given(rounds=some.integers(1, 200), apart=some.integers(4, 1000))
def test_auctions_come_one_after_the_other_within_the_span(rounds: int, apart: int) -> None:
    """Never two at one moment as long as 4 ms lie between them, and none at either end."""
    span_ms = apart * (rounds + 1)
    at_ms = moments({"span_ms": span_ms}, rounds)
    assert at_ms.tolist() == [apart * turn for turn in range(1, rounds + 1)]


def test_moments_are_even_to_a_millisecond() -> None:
    """Three auctions in ten milliseconds come at 2, 5 and 7."""
    assert moments({"span_ms": 10}, 3).tolist() == [2, 5, 7]
    assert moments({"span_ms": 10}, 0).tolist() == []


@pytest.mark.parametrize(
    ("late", "at_once"),
    [
        ({}, True),
        ({"value_delay_mean_ms": 1}, False),
        ({"outcome_delay_ms": 1}, False),
        ({"lost_share": 0.01}, False),
    ],
)
def test_any_lateness_ends_at_once(late: dict[str, Any], at_once: bool) -> None:
    """One late or lost kind of news is enough to go the longer way."""
    assert is_at_once(market(**late)) is at_once


def test_values_known_before_are_hints_and_worth() -> None:
    """A bidder that knows its value is told just that, and what it wins counts at that."""
    found = drawn(values=EVEN)
    assert known_before(market(values=EVEN))
    assert found.hints is not None
    assert np.array_equal(found.hints, found.values)
    assert np.array_equal(found.worth, found.values)
    assert [one.hint for one in found.auctions()] == found.values.tolist()


def test_values_that_are_not_known_count_at_their_mean() -> None:
    """Every impression counts for the mean of the law, so luck of values is not in the figures."""
    found = drawn()
    assert set(found.worth.tolist()) == {round(0.3 * SCALE)}
    assert mean_worth(market()) == round(0.3 * SCALE)
    assert set(found.values.tolist()) == {0, SCALE}
    assert mean_worth(market(values=EVEN)) == SCALE // 2


def test_drift_goes_down_and_comes_back() -> None:
    """A half turn of the cosine leads from 1 to the change and the other half back."""
    found = drawn(kind="drift", change=0.25, rounds=400)
    worth = found.worth / (0.3 * SCALE)
    assert worth[0] == pytest.approx(1.0)
    assert worth[200] == pytest.approx(0.25)
    assert worth[100] == pytest.approx(0.625)
    # A cosine is even about its lowest point.
    assert worth[1:200] == pytest.approx(worth[:200:-1], abs=1e-6)


def test_a_jump_comes_in_the_middle() -> None:
    """The first half is worth the law's mean, the second the change of it, with no way between."""
    worth = drawn(kind="abrupt", change=0.5, rounds=101).worth
    assert worth[:50].tolist() == [round(0.3 * SCALE)] * 50
    assert worth[50:].tolist() == [round(0.15 * SCALE)] * 51


@pytest.mark.parametrize("kind", ["drift", "abrupt"])
@pytest.mark.parametrize("change", [0.0, 0.5, 2.0])
def test_values_follow_the_course_they_are_counted_at(kind: str, change: float) -> None:
    """In each half the mean value is the mean worth, within five standard errors."""
    found = drawn(kind=kind, change=change, rounds=8_000)
    for half in (slice(0, 4_000), slice(4_000, None)):
        values, worth = found.values[half], found.worth[half]
        error = float(values.std()) / math.sqrt(4_000)
        assert float(values.mean()) == pytest.approx(float(worth.mean()), abs=5 * error + 1)


def test_a_change_beyond_certainty_is_cut_at_it() -> None:
    """A chance of 0.3 that grows tenfold is a chance of 1, and no value comes twice."""
    found = drawn(kind="abrupt", change=10.0, rounds=200)
    assert found.values[100:].tolist() == [SCALE] * 100
    assert found.worth[100:].tolist() == [SCALE] * 100


def test_a_coin_decides_both_price_and_value() -> None:
    """Two prices a gap apart, the lower of which alone brings a value, each half of the time."""
    found = drawn(kind="coin_flip", gap=0.1, rounds=4_000)
    low, high = math.ceil(0.55 * SCALE), math.ceil(0.65 * SCALE)
    assert set(found.least.tolist()) <= {low, low + 1, high, high + 1}
    cheap = found.least < 0.6 * SCALE
    assert np.array_equal(found.values, np.where(cheap, SCALE, 0))
    assert float(cheap.mean()) == pytest.approx(0.5, abs=0.04)


def test_one_price_stands_above_the_mean_value() -> None:
    """By sqrt(6 ln T / T) of an event's amount: 0.29979 of it at T = 400, worked out apart."""
    found = drawn(kind="above_value", rounds=400)
    gap = math.sqrt(6 * math.log(400) / 400)
    assert gap == pytest.approx(0.29979, abs=1e-4)
    assert set(found.least.tolist()) == {math.ceil((0.3 + gap) * SCALE)}
    assert (found.worth < found.least).all()


@pytest.mark.parametrize("mean_ms", [1, 1_000, 3_600_000])
def test_delays_are_exponential_with_their_mean(mean_ms: int) -> None:
    """Never 0, since a value follows its win; rounding up adds at most a millisecond."""
    late = delays(mean_ms, np.random.default_rng(1), 20_000)
    assert min(late) >= 1
    assert mean_ms * 0.96 <= sum(late) / 20_000 <= mean_ms * 1.04 + 1


def test_no_delay_draws_nothing() -> None:
    """Chance is left where it was, so a market without delays is drawn the same as before."""
    rng, fresh = np.random.default_rng(1), np.random.default_rng(1)
    assert delays(0, rng, 3) == [0, 0, 0]
    assert told(market(outcome_delay_ms=9), rng, 3) == [9, 9, 9]
    assert rng.random() == fresh.random()


def test_a_share_of_outcomes_is_never_told() -> None:
    """About that share is lost, and what is told comes after the named delay."""
    heard = told(market(outcome_delay_ms=7, lost_share=0.25), np.random.default_rng(2), 8_000)
    assert set(heard) == {None, 7}
    assert heard.count(None) / 8_000 == pytest.approx(0.25, abs=0.02)


def test_lost_news_moves_no_price() -> None:
    """Delays are drawn after the market, so late news is the only thing that differs."""
    plain, late = drawn(), drawn(value_delay_mean_ms=500, outcome_delay_ms=5, lost_share=0.5)
    assert all(np.array_equal(getattr(plain, n), getattr(late, n)) for n in COLUMNS)
    assert plain.value_delays_ms != late.value_delays_ms
    assert None in late.told_delays_ms
