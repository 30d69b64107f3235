"""Rules on what impressions bring at their edges, with tails that are worked out beside them."""

from __future__ import annotations

import math

import pytest
from scipy import stats

from service.tripwires.counts import Counts, Series
from service.tripwires.history import Facts
from service.tripwires.judging import judge
from service.tripwires.saying import Saw
from tests.tripwires.recorded import DAY_MS, HOUR_MS, LOG, MINUTE_MS, USUAL, alone, facts
from tests.tripwires.test_false_alarms import days

HOURS = 8 * 60
IN_AN_HOUR = 61
MONTH = 31  # Of which 28 are the past: not the first, nor the two that a window touches.


def saw(known: Facts, rule: str, **said: object) -> Saw | None:
    """What one rule sees alone."""
    found = judge(known, alone(rule, **said))
    return found[0].saw if found else None


def spoilt(last: Counts, of_last: int = IN_AN_HOUR, usual: Counts = USUAL) -> Facts:
    """A record whose last minutes were others."""
    return facts(HOURS, lambda _: usual, lambda _: last, of_last)


def by_days(rows: list[Counts], arrival: str) -> Facts:
    """A record of whole days, judged at the end of the last."""
    at = [(number * DAY_MS, counts) for number, counts in enumerate(rows)]
    now, minutes = len(rows) * DAY_MS - 1, Series(MINUTE_MS, [])
    return Facts(now, minutes, Series(HOUR_MS, at), Series(DAY_MS, at), arrival, "EUR")


def test_a_day_without_a_value_has_its_exact_chance() -> None:
    """Of 196 values in 28 days and none today, each had 28 chances in 29 to fall on another."""
    tail = (28 / 29) ** 196
    month = days([7] * (MONTH - 1) + [0])
    assert saw(month, "value_count", alpha=0.999 * tail) is None
    found = saw(month, "value_count", alpha=1.001 * tail)
    assert found is not None
    assert found.sentence == (
        "0 values above 0 in 24 hours; 7.0 were to be expected of 1000 wins;"
        f" by chance 1 in {1 / tail:,.0f}"
    )
    assert found.numbers == {"values": 0, "expected": 7.0, "wins": 1000}


@pytest.mark.parametrize("today", [16, 20, 30])
def test_a_day_with_many_has_the_chance_of_the_binomial(today: int) -> None:
    """Given the sum of past and present (scipy.stats.binomtest as an outside check)."""
    whole = 196 + today
    tail = stats.binomtest(today, whole, 1 / 29, alternative="greater").pvalue
    month = days([7] * (MONTH - 1) + [today])
    assert saw(month, "value_count", alpha=0.999 * tail) is None
    assert saw(month, "value_count", alpha=1.001 * tail) is not None


@pytest.mark.parametrize(("today", "fires"), [(13, False), (14, True), (4, False), (3, True)])
def test_the_ratio_must_be_met_however_sure(today: int, fires: bool) -> None:
    """Twice seven or half of it, with a level that everything passes."""
    month = days([7] * (MONTH - 1) + [today])
    assert (saw(month, "value_count", alpha=1.0) is not None) is fires


@pytest.mark.parametrize(("usual", "least", "fires"), [(7, 7, True), (7, 8, False)])
def test_few_expected_values_are_not_missed(usual: int, least: int, fires: bool) -> None:
    """Either so many came, or so many were to be expected."""
    month = days([usual] * (MONTH - 1) + [0])
    assert (saw(month, "value_count", alpha=0.5, count_min=least) is not None) is fires


def test_a_day_without_wins_expects_no_values() -> None:
    """Nothing won, nothing earned; a young line item has nothing to be held against."""
    rows = [Counts(bids=9, wins=9, words=7, logs=7)] * (MONTH - 1)
    assert saw(by_days([*rows, Counts(bids=9)], "accrues"), "value_count", alpha=1.0) is None
    assert saw(by_days(rows[:4], "accrues"), "value_count", alpha=1.0) is None


@pytest.mark.parametrize(
    ("moved", "factor"), [(693, None), (694, 2.0017), (-693, None), (-694, 0.4996)]
)
def test_a_size_is_far_from_twice_or_half_on(moved: int, factor: float | None) -> None:
    """The logarithm of 2 is 0.6931, and logarithms are kept in thousandths."""
    log = LOG + moved
    found = saw(spoilt(USUAL._replace(logs=2 * log, log_squares=2 * log * log)), "value_size")
    assert (found.numbers["factor"] if found else None) == factor


def test_the_newest_part_of_a_window_is_looked_at_first() -> None:
    """A fault of six minutes is told by the twelfth of an hour, with no more values than that."""
    log = LOG + 1609
    found = saw(spoilt(USUAL._replace(logs=2 * log, log_squares=2 * log * log), 6), "value_size")
    assert found is not None
    assert found.sentence.startswith("12 values in 5 minutes are 5 times as large as usual")
    assert found.numbers["history_values"] == 600
    assert found.since_ms == (HOURS - 6) * MINUTE_MS


def test_values_that_always_vary_by_tenfold_are_no_news_at_twice() -> None:
    """The deviation of their logarithms is 2.3, so that a dozen of them may well double."""
    low, high = LOG - 2303, LOG + 2303
    wild = USUAL._replace(logs=low + high, log_squares=low * low + high * high)
    log = LOG + 700
    last = USUAL._replace(logs=2 * log, log_squares=2 * log * log)
    assert saw(spoilt(last, 6, wild), "value_size") is None
    assert saw(spoilt(last, 6), "value_size") is not None


@pytest.mark.parametrize(("each_hour", "known"), [(3, False), (4, True)])
def test_too_few_earlier_values_have_no_usual_size(each_hour: int, known: bool) -> None:
    """Five hours of three are 15, of four are 20: twenty are enough."""

    def usual(minute: int) -> Counts:
        return USUAL._replace(
            words=1, zeros=int(minute % 60 >= each_hour), logs=LOG * int(minute % 60 < each_hour),
            log_squares=LOG * LOG * int(minute % 60 < each_hour),
        )  # fmt: skip

    log = LOG + 3000
    last = USUAL._replace(words=2, zeros=0, logs=2 * log, log_squares=2 * log * log)
    found = saw(facts(HOURS, usual, lambda _: last, IN_AN_HOUR), "value_size")
    assert (found is not None) is known


@pytest.mark.parametrize(("zeros", "fires"), [(4, True), (5, False)])
def test_zeros_are_missed_from_half_of_the_usual_on(zeros: int, fires: bool) -> None:
    """Eight in ten are usual; four in ten are half of that, five are more."""
    found = saw(spoilt(USUAL._replace(words=10, zeros=zeros)), "zero_values")
    assert (found is not None) is fires
    assert found is None or found.numbers["usual_share"] == 0.8


def test_no_zero_from_many_wins_is_found_by_few_words() -> None:
    """Six words alone prove nothing; that 60 wins brought not one zero of 48 does."""
    last = USUAL._replace(words=1, zeros=0, logs=LOG, log_squares=LOG * LOG)
    found = saw(spoilt(last, 6), "zero_values")
    assert found is not None
    assert (found.numbers["zeros"], found.numbers["values"]) == (0, 6)
    assert "less than 1 in 10^12" in found.sentence
    poor = last._replace(wins=0)
    assert saw(spoilt(poor, 6), "zero_values", alpha=1e-9) is None


def test_a_feed_that_sent_hardly_a_zero_misses_none() -> None:
    """Nineteen in its past are too few to be a habit."""

    def usual(minute: int) -> Counts:
        return USUAL._replace(words=2, zeros=int(60 <= minute < 79))

    last = USUAL._replace(words=2, zeros=0)
    assert saw(facts(HOURS, usual, lambda _: last, IN_AN_HOUR), "zero_values", alpha=1.0) is None


@pytest.mark.parametrize(("words", "fires"), [(500, True), (501, False), (0, True)])
def test_words_are_missed_from_half_on(words: int, fires: bool) -> None:
    """Where each win gets its one word: 1000 wins without 500 of theirs."""
    usual = Counts(bids=1000, wins=1000, words=1000)
    rows = [usual] * (MONTH - 1) + [usual._replace(words=words)]
    found = saw(by_days(rows, "once"), "unknown_values")
    assert (found is not None) is fires
    assert found is None or found.numbers == {
        "unknown": 1000 - words, "wins": 1000, "usual_share": 0.0
    }  # fmt: skip


@pytest.mark.parametrize(("parked", "fires"), [(50, True), (49, False)])
def test_homeless_values_must_be_half_of_what_is_heard(parked: int, fires: bool) -> None:
    """Where values accrue a few always wait for their win; half of them is another matter."""
    usual = Counts(bids=100, wins=100, words=98, parked=2)
    last = Counts(bids=100, wins=100, words=100 - parked, parked=parked)
    found = saw(by_days([usual] * (MONTH - 1) + [last], "accrues"), "unknown_values")
    assert (found is not None) is fires
    assert found is None or (found.numbers["unknown"], found.numbers["values"]) == (50, 100)


def test_a_value_that_found_its_win_waits_no_more() -> None:
    """Parked less unparked, and never less than none."""
    usual = Counts(bids=100, wins=100, words=98, parked=2)
    for unparked in (60, 90):
        last = Counts(bids=100, wins=100, words=100, parked=60, unparked=unparked)
        known = by_days([usual] * (MONTH - 1) + [last], "accrues")
        assert saw(known, "unknown_values") is None


def test_hours_that_differ_by_themselves_make_sizes_less_sure() -> None:
    """Whole hours twice as large and half as large: a fresh hour of twice is one more of them."""

    def usual(minute: int) -> Counts:
        log = LOG + (700 if minute // 60 % 2 else -700)
        return USUAL._replace(logs=2 * log, log_squares=2 * log * log)

    log = LOG + 1400
    last = USUAL._replace(logs=2 * log, log_squares=2 * log * log)
    assert saw(facts(HOURS, usual, lambda _: last, IN_AN_HOUR), "value_size") is None
    assert saw(spoilt(last), "value_size") is not None
    assert math.exp(1.4) > 4
