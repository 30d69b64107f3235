"""The watch over changes, its scores against the logarithms they stand for, and its edges."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.learner.change import UNITS_PER_NAT
from service.learner.watch import FIRST, REFERENCE_HITS, Watch, score, step

UNIT = UNITS_PER_NAT
HIGH = 8.0
USUAL = Watch(trials=1000, hits=100 * UNIT)


@pytest.mark.parametrize(
    ("trials", "hits", "usual", "other"),
    [(100, 10, 0.1, 0.2), (100, 30, 0.1, 0.2), (7, 0, 0.5, 0.25), (1, 1, 0.01, 0.02)],
)
def test_a_score_is_the_log_likelihood_of_bernoulli_counts(
    trials: int, hits: int, usual: float, other: float
) -> None:
    """Page, Biometrika 41:100-115, 1954: k ln(q/p) + (n - k) ln((1 - q)/(1 - p))."""
    exact = hits * math.log(other / usual) + (trials - hits) * math.log((1 - other) / (1 - usual))
    assert score(trials, hits * UNIT, usual, other) / UNIT == pytest.approx(exact, abs=1e-9)


@pytest.mark.parametrize("usual", [0.0, 1.0])
def test_from_a_rate_without_chance_nothing_is_told(usual: float) -> None:
    """Where nothing or everything has hit, no other rate can be told from it."""
    assert score(100, 50 * UNIT, usual, 0.5) == 0


def test_the_same_rate_scores_nothing() -> None:
    """There is no evidence for what is no other."""
    assert score(100, 37 * UNIT, 0.3, 0.3) == 0


@pytest.mark.parametrize("trials", [0, -1])
def test_an_empty_cell_is_no_step(trials: int) -> None:
    """It neither counts nor moves a moment."""
    assert step(USUAL, trials, 0, 77, 2.0, HIGH) is USUAL


def test_until_the_usual_is_known_it_is_only_learnt() -> None:
    """Twenty hits; the cell that completes them is not yet judged, the next one is."""
    watch = FIRST
    for start_ms in range(REFERENCE_HITS):
        watch = step(watch, 10, UNIT, start_ms, 2.0, HIGH)
        assert (watch.up, watch.down, watch.up_ms, watch.down_ms) == (0, 0, 0, 0)
    assert (watch.trials, watch.hits) == (10 * REFERENCE_HITS, REFERENCE_HITS * UNIT)
    judged = step(watch, 10, 5 * UNIT, 99, 2.0, HIGH)
    assert judged.up > 0


def test_the_usual_rate_moves_no_score_far() -> None:
    """A hundred cells just as usual are no evidence of a change either way."""
    watch = USUAL
    for start_ms in range(100):
        watch = step(watch, 10, UNIT, start_ms, 2.0, HIGH)
    assert (watch.alarms, watch.up, watch.down) == (0, 0, 0)
    assert (watch.trials, watch.hits) == (2000, 200 * UNIT)


@pytest.mark.parametrize(("hits", "side"), [(40, "up"), (0, "down")])
def test_a_change_is_dated_to_the_first_cell_of_its_rise(hits: int, side: str) -> None:
    """The score left nothing there, and has not been back since."""
    watch, start_ms = USUAL, 0
    while watch.alarms == 0:
        start_ms += 1000
        assert start_ms < 100_000
        watch = step(watch, 100, hits * UNIT, start_ms, 2.0, HIGH)
        if watch.alarms == 0:
            assert getattr(watch, f"{side}_ms") == 1000
    assert watch == FIRST._replace(alarms=1, changed_ms=1000)


def test_after_an_alarm_the_usual_is_learnt_anew() -> None:
    """And alarms are counted on."""
    watch = step(USUAL._replace(alarms=3), 1000, 900 * UNIT, 5, 2.0, HIGH)
    assert (watch.alarms, watch.trials, watch.hits) == (4, 0, 0)


def test_a_rate_near_one_can_only_rise_half_of_what_is_left() -> None:
    """Twice eight tenths is no rate; nine tenths is looked for, and can be found."""
    often = Watch(trials=100, hits=80 * UNIT)
    one = step(often, 100, 95 * UNIT, 7, 2.0, 1e9)
    exact = 95 * math.log(0.9 / 0.8) + 5 * math.log(0.1 / 0.2)
    assert one.up / UNIT == pytest.approx(exact, abs=1e-9)


@given(some.lists(some.tuples(some.integers(1, 50), some.integers(0, 50)), max_size=30))
@settings(max_examples=50, deadline=None)
def test_scores_are_never_below_nothing_and_sums_are_of_whole_units(
    cells: list[tuple[int, int]],
) -> None:
    """Whatever comes: whole numbers, so the state is the same bytes on every machine."""
    watch = FIRST
    for start_ms, (trials, hits) in enumerate(cells):
        before = watch.alarms
        watch = step(watch, trials, min(hits, trials) * UNIT, start_ms, 2.0, HIGH)
        assert watch.alarms - before in (0, 1)
        assert all(type(number) is int for number in watch)
        assert min(watch) >= 0
        assert max(watch.up, watch.down) < HIGH * UNIT


@pytest.mark.parametrize("ratio", [1.5, 2.0, 4.0])
def test_evidence_for_one_side_is_evidence_against_the_other(ratio: float) -> None:
    """A cell of many hits raises one score and leaves the other at nothing."""
    many, few = (step(USUAL, 100, hits * UNIT, 1, ratio, 1e9) for hits in (60, 1))
    assert many.up > 0 == many.down
    assert few.down > 0 == few.up
