"""Quiet months: how often a rule fires where nothing is wrong, at the level it promises."""

from __future__ import annotations

import numpy as np
import pytest

from service.tripwires.counts import Counts, Series
from service.tripwires.history import Facts
from service.tripwires.judging import judge
from tests.tripwires.recorded import DAY_MS, HOUR_MS, MINUTE_MS, alone

SEVEN = 7.0
WINS = 1000
MONTH = 28


def days(counts: list[int]) -> Facts:
    """A record of whole days, judged at the end of the last; minutes are needed for none."""
    rows = [Counts(bids=WINS, wins=WINS, words=n, logs=n, log_squares=n) for n in counts]
    starts = [number * DAY_MS for number in range(len(rows))]
    at = list(zip(starts, rows, strict=True))
    now = len(rows) * DAY_MS - 1
    # The day's sum stands in its first hour, which is all that a window of a day looks at.
    hours = Series(HOUR_MS, [(start, counts) for start, counts in at])
    return Facts(now, Series(MINUTE_MS, []), hours, Series(DAY_MS, at), "accrues", "EUR")


def alarms(draw: np.ndarray, alpha: float) -> float:
    """The share of days with an alarm; each row is a month, the day after it is judged."""
    rules = alone("value_count", alpha=alpha, ratio=1.05, count_min=1)
    fired = [bool(judge(days([int(n) for n in row]), rules)) for row in draw]
    return float(np.mean(fired))


@pytest.mark.parametrize("alpha", [0.05, 0.01])
def test_seven_a_day_raise_no_more_alarms_than_promised(alpha: float) -> None:
    """Two sides, each at its level: at most twice alpha, and not so few that it is blind."""
    generator = np.random.default_rng(6)
    rate = alarms(generator.poisson(SEVEN, (3000, MONTH + 2)), alpha)
    deviation = (2 * alpha / 3000) ** 0.5
    assert rate <= 2 * alpha + 3 * deviation
    assert rate >= alpha / 5


def test_days_that_vary_more_raise_hardly_more() -> None:
    """With twice the variance of Poisson a plain tail errs threefold; ours knows it by then."""
    generator = np.random.default_rng(7)
    # Gamma-mixed Poisson (Greenwood and Yule 1920) with variance = 2 x mean.
    means = generator.gamma(SEVEN, 1.0, (3000, MONTH + 2))
    draw = generator.poisson(means)
    rate = alarms(draw, 0.01)
    assert rate <= 0.03
    expected = draw[:, 1:-2].mean(axis=1)
    plain = np.abs(draw[:, -1] - expected) / np.sqrt(expected)
    assert float(np.mean(plain > 2.576)) > 0.04


def test_a_day_without_one_is_found_and_a_poor_day_is_not() -> None:
    """None where seven are usual has a chance of 1 in 1,100; two have one in 34."""
    month = [7, 4, 9, 6, 10, 5, 8] * 4
    rules = alone("value_count", alpha=0.002)
    assert judge(days([*month, 7, 0]), rules)
    assert not judge(days([*month, 7, 2]), rules)
    assert not judge(days([*month, 7, 12]), rules)
    assert judge(days([*month, 7, 25]), rules)


def test_a_look_each_hour_raises_a_few_times_as_many() -> None:
    """Looks share most of their day: measured 3.9 times one look's level for 24, not 24 times."""
    generator, alpha, months = np.random.default_rng(3), 0.05, 120
    rules = alone("value_count", alpha=alpha, ratio=1.05, count_min=1)
    alarmed = 0
    for _ in range(months):
        month = by_hours(generator.poisson(SEVEN / 24, (MONTH + 1, 24)))
        looks = [at_hour(*month, hour) for hour in range(24)]
        alarmed += any(judge(facts, rules) for facts in looks)
    assert alarmed / months <= 6 * 2 * alpha
    assert alarmed / months >= alpha


def by_hours(draw: np.ndarray) -> tuple[Series, Series]:
    """Days of hours as hours and as days."""

    def counts(conversions: int, wins: int) -> Counts:
        few = {"words": conversions, "logs": conversions, "log_squares": conversions}
        return Counts(bids=wins, wins=wins, **few)

    hours = [
        (day * DAY_MS + hour * HOUR_MS, counts(int(draw[day, hour]), 40))
        for day in range(len(draw))
        for hour in range(24)
    ]
    days = [(day * DAY_MS, counts(int(draw[day].sum()), 960)) for day in range(len(draw))]
    return Series(HOUR_MS, hours), Series(DAY_MS, days)


def at_hour(hours: Series, days: Series, hour: int) -> Facts:
    """What is known at the end of an hour of the last day."""
    start = (len(days.starts) - 1) * DAY_MS + hour * HOUR_MS
    minutes = Series(MINUTE_MS, [(start, hours.at(start))])
    return Facts(start + HOUR_MS - 1, minutes, hours, days, "accrues", "EUR")
