"""Late values through the real fold: what each way of counting reads, and what it earns."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from service.decision.counts import Counts
from service.decision.price import Proposal, ready
from service.learner.fold import Lesson, fold
from service.learner.memory import Memory
from service.learner.rules import Rules
from service.rehearsal import late
from service.rehearsal.late import DAY_MS, DELAY_MEAN_MS, WINDOW_MS, Job
from service.rehearsal.rare import SMALL

OPPORTUNITIES, SEEDS = 50_000, range(3)


def earned(way: str, opportunities: int = OPPORTUNITIES) -> float:
    """The mean over a few seeded fortnights, in EUR."""
    return late.units([late.played(Job(way, opportunities, seed)) for seed in SEEDS])[0]


def memory_of(days: int, conversion_day: int) -> Memory:
    """One impression an hour, and the one of a given day's start brought a value a day later."""
    at_ms = range(1, days * DAY_MS, DAY_MS // 24)
    bought = [Lesson("won", {"price": 1_000_000, "round": 1}, one) for one in at_ms]
    won_ms = conversion_day * DAY_MS + 1
    body = {"amount": SMALL.typical, "was": None, "won_ms": won_ms}
    value = Lesson("value", body, won_ms + DAY_MS)
    lessons = sorted([*bought, value], key=lambda lesson: lesson.at_ms)
    terms = late.terms_of(late.KNOWN_LAW)
    return fold(Memory.fresh(), lessons, Rules(terms.ceiling, terms.arrival, WINDOW_MS))


def test_each_way_reads_what_its_name_says() -> None:
    """
    Ten days of an impression an hour: three days are closed, ten are bought, and corrected
    the last seven count by the share (1 - e^(-a/m)) / (1 - e^(-w/m)) of their age a.
    """
    memory, terms = memory_of(10, 8), late.terms_of(late.KNOWN_LAW)
    ages = np.arange(0.5, 7 * 24) / 24.0
    share = np.expm1(-ages / 1.5) / np.expm1(-7.0 / 1.5)

    # A cell lasts a 64th of the window, so the border of what is closed is that coarse.
    assert float(late.matured(memory, terms).known) == pytest.approx(72.0, abs=3.0)
    assert float(late.matured(memory, terms).converted) == 0.0
    assert float(late.naive(memory, terms).known) == 240.0
    assert float(late.naive(memory, terms).converted) == 1.0
    corrected = Counts.of(memory, terms)
    assert float(corrected.known) == pytest.approx(72.0 + share.sum(), abs=1.5)
    assert float(corrected.converted) == 1.0


def test_the_price_is_the_one_production_would_name() -> None:
    """To the nano, from the same memory under the same terms."""
    memory = memory_of(9, 2)
    for way in (late.KNOWN_LAW, late.FITTED):
        terms = late.terms_of(way)
        answer = ready(memory, terms).answer
        assert isinstance(answer, Proposal)
        assert late.price(memory, terms, Counts.of) == answer.price


def test_delays_are_exponential_within_the_window() -> None:
    """None beyond it; their mean is m - w / (e^(w/m) - 1), 1.4335 days, less than m itself."""
    market = late.stretch(np.random.default_rng(2), OPPORTUNITIES)
    mean = DELAY_MEAN_MS - WINDOW_MS / np.expm1(WINDOW_MS / DELAY_MEAN_MS)

    assert mean / DAY_MS == pytest.approx(1.4335, abs=1e-4)
    assert float(market.delays_ms.mean()) == pytest.approx(mean, rel=0.02)
    assert 0 < market.delays_ms.min() <= market.delays_ms.max() <= WINDOW_MS
    assert (np.diff(market.at_ms) > 0).all()
    assert market.at_ms[-1] < 14 * DAY_MS


def test_waiting_for_closed_windows_loses_and_correcting_earns() -> None:
    """A week at the guess costs more than a fortnight can bring; open impressions must count."""
    oracle, matured = earned(late.ORACLE), earned(late.MATURED)

    assert oracle == pytest.approx(10.9, abs=0.2)
    assert matured < 0.0
    assert earned(late.KNOWN_LAW) > 0.3 * oracle


def test_with_enough_impressions_correcting_earns_most_of_it() -> None:
    """700,000 opportunities, one fortnight: above 80 %, and closed windows alone lose money."""
    job = Job(late.KNOWN_LAW, 700_000, 0)
    oracle = late.played(replace(job, way=late.ORACLE))

    assert late.played(job) > 0.8 * oracle
    assert late.played(replace(job, way=late.MATURED)) < 0


def test_a_fitted_law_earns_about_what_the_known_one_does() -> None:
    """Four conversions in ten thousand tell the law within a few days."""
    fitted = late.played(Job(late.FITTED, 150_000, 1))
    known = late.played(Job(late.KNOWN_LAW, 150_000, 1))
    oracle = late.played(Job(late.ORACLE, 150_000, 1))

    assert abs(fitted - known) < 0.25 * oracle
