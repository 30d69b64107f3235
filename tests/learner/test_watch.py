"""The change detector on cells: rare false alarms, quick true ones, exact scores, any order."""

from __future__ import annotations

import math

import numpy as np
import pytest

from service.learner.change import UNITS_PER_NAT
from service.learner.watch import FIRST, REFERENCE_HITS, Watch, score, step

HIGH = 8.0


def watched(hits: list[int], trials: int, ratio: float, start: Watch = FIRST) -> list[Watch]:
    """The watch after each cell of so many trials."""
    seen, watch = list[Watch](), start
    for at, count in enumerate(hits):
        watch = step(watch, trials, count * UNITS_PER_NAT, at, ratio, HIGH)
        seen.append(watch)
    return seen


def test_a_score_is_the_log_likelihood_ratio() -> None:
    """3 of 50 at 0.04 against 0.02: 3 ln 2 + 47 ln(0.96 / 0.98) by the formula of Bernoulli."""
    exact = 3 * math.log(2.0) + 47 * math.log(0.96 / 0.98)

    assert score(50, 3 * UNITS_PER_NAT, 0.02, 0.04) / UNITS_PER_NAT == pytest.approx(
        exact, rel=1e-11
    )
    assert score(50, 0, 0.0, 0.0) == 0


def test_one_step_by_hand() -> None:
    """Where the usual is 20 of 1,000, four in fifty score ln-likelihoods of twice and half it."""
    usual = FIRST._replace(trials=1000, hits=20 * UNITS_PER_NAT)
    seen = step(usual, 50, 4 * UNITS_PER_NAT, 7, 2.0, HIGH)
    up = 4 * math.log(2.0) + 46 * math.log(0.96 / 0.98)

    assert seen.up / UNITS_PER_NAT == pytest.approx(up, rel=1e-11)
    assert (seen.down, seen.up_ms, seen.alarms) == (0, 7, 0)
    assert (seen.trials, seen.hits) == (1050, 24 * UNITS_PER_NAT)


def test_nothing_is_looked_for_before_the_usual_is_known() -> None:
    """The first twenty hits only say what is usual, and a cell without trials says nothing."""
    few = watched([1] * (REFERENCE_HITS - 1) + [0] * 5, 1, 2.0)[-1]

    assert (few.up, few.down, few.alarms) == (0, 0, 0)
    assert step(few, 0, 0, 1, 2.0, HIGH) == few


@pytest.mark.parametrize(("rate", "trials"), [(0.2, 1), (0.01, 10), (0.001, 100)])
def test_false_alarms_are_rare(rate: float, trials: int) -> None:
    """In 100 runs of 500 hits without a change, at most 14; 6 of 10 if the usual stood still."""
    chance, alarmed = np.random.default_rng(5), 0
    for _ in range(100):
        hits = chance.binomial(trials, rate, int(500 / rate / trials)).tolist()
        alarmed += watched(hits, trials, 2.0)[-1].alarms > 0

    assert alarmed <= 14


@pytest.mark.parametrize("after", [0.002, 0.05])
def test_a_change_is_found_soon_and_dated(after: float) -> None:
    """A fivefold change after 200 hits: found and dated in 17 of 20 runs."""
    chance, found = np.random.default_rng(6), 0
    for _ in range(20):
        before = chance.binomial(10, 0.01, 2000).tolist()
        hits = [*before, *chance.binomial(10, after, 600).tolist()]
        seen = watched(hits, 10, 3.0)
        at = next((at for at, watch in enumerate(seen) if watch.alarms), 0)
        found += 2000 <= at and abs(seen[at].changed_ms - 2000) < 150

    assert found >= 17


def test_an_alarm_begins_anew() -> None:
    """What was usual is forgotten; only the count of alarms and the date are kept."""
    usual = FIRST._replace(trials=10_000, hits=100 * UNITS_PER_NAT)
    seen = watched([9, 9, 9], 10, 2.0, usual)
    alarm = next(watch for watch in seen if watch.alarms)

    assert alarm == FIRST._replace(alarms=1, changed_ms=0)


def test_shares_of_the_scale_count_like_hits() -> None:
    """Half a hit twice is one hit, so bounded values are watched by the same formula."""
    usual = FIRST._replace(trials=100, hits=30 * UNITS_PER_NAT)
    halves = step(usual, 2, UNITS_PER_NAT // 2 + UNITS_PER_NAT // 2, 1, 2.0, HIGH)

    assert halves == step(usual, 2, UNITS_PER_NAT, 1, 2.0, HIGH)
