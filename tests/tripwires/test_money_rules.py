"""Rules on money at their edges, each threshold met exactly and missed by one."""

from __future__ import annotations

from typing import Any

import pytest

from service.tripwires.counts import NOTHING, Counts, Series
from service.tripwires.history import Facts
from service.tripwires.judging import judge
from service.tripwires.money_rules import far_off
from service.tripwires.saying import Saw
from tests.tripwires.recorded import DAY_MS, HOUR_MS, MINUTE_MS, USUAL, alone, facts

HOURS = 8 * 60
# A window of an hour holds the buckets of 61 minutes: the one it begins in, and the newest.
IN_AN_HOUR = 61


def saw(known: Facts, rule: str, **said: object) -> Saw | None:
    """What one rule sees alone."""
    found = judge(known, alone(rule, **said))
    return found[0].saw if found else None


@pytest.mark.parametrize(
    ("seen", "usual", "ratio", "far"),
    [
        # All alike: the deviation is 0, so six twentieths of 10 must be passed.
        (13.0, [10.0] * 4, 1.2, False),
        (13.1, [10.0] * 4, 1.2, True),
        (6.9, [10.0] * 4, 1.2, True),
        # Below, what is steady may come as near to nothing as the ratio says, and no nearer.
        (8.4, [10.0] * 4, 1.2, False),
        (8.3, [10.0] * 4, 1.2, True),
        # The ratio must be met however sure the difference is.
        (13.1, [10.0] * 4, 1.4, False),
        (14.0, [10.0] * 4, 1.4, True),
        # Median 10, median deviation 2, robust deviation 2.9652: six of them are 17.79.
        (27.7, [8.0, 12.0, 8.0, 12.0], 2.0, False),
        (27.8, [8.0, 12.0, 8.0, 12.0], 2.0, True),
        # Nought is only 10 away, yet nothing of what is steady is far.
        (0.0, [8.0, 12.0, 8.0, 12.0], 2.0, True),
        # Median 10, median deviation 8: so wild that even nought is usual.
        (0.0, [2.0, 18.0, 2.0, 18.0], 2.0, False),
        # Where nothing is usual, nothing is far from it.
        (9.0, [0.0, 0.0, 0.0, 5.0], 2.0, False),
        (9.0, [], 2.0, False),
    ],
)
def test_far_is_a_ratio_and_six_robust_deviations(
    seen: float, usual: list[float], ratio: float, far: bool
) -> None:
    """Worked by hand with 1.4826 deviations a median deviation (Hampel, JASA 69, 1974)."""
    assert far_off(seen, usual, ratio) is far


@pytest.mark.parametrize(
    ("paid", "fires"),
    [(20_000_000, True), (19_900_000, False), (5_000_000, True), (5_100_000, False)],
)
def test_a_price_is_far_from_twice_or_half_on(paid: int, fires: bool) -> None:
    """Ten wins a minute cost 10 million nanos as a rule: a thousand of them 1 EUR."""
    last = USUAL._replace(paid=paid)
    known = facts(HOURS, last=lambda _: last, of_last=IN_AN_HOUR)
    assert (saw(known, "clearing_price") is not None) is fires


def test_what_a_price_rule_says_has_both_prices() -> None:
    """In CPM and the currency, over the wins and the hour it looked at."""
    last = USUAL._replace(paid=40_000_000)
    known = facts(HOURS, last=lambda _: last, of_last=IN_AN_HOUR, currency="CHF")
    found = saw(known, "clearing_price")
    assert found == Saw(
        "a thousand of the 610 impressions won in 60 minutes cost 4.00 CHF; usually 1.00 CHF",
        {"wins": 610, "mean_price_cpm_nanos": 4_000_000, "usual_price_cpm_nanos": 1_000_000},
        (HOURS - IN_AN_HOUR) * MINUTE_MS,
    )


@pytest.mark.parametrize(("least", "fires"), [(610, True), (611, False)])
def test_too_few_wins_have_no_price(least: int, fires: bool) -> None:
    """As many as the setting wants are enough."""
    last = USUAL._replace(paid=40_000_000)
    known = facts(HOURS, last=lambda _: last, of_last=IN_AN_HOUR)
    assert (saw(known, "clearing_price", count_min=least) is not None) is fires


def test_a_past_that_won_nothing_has_no_usual_price() -> None:
    """Bids went out and all were lost: the first wins are compared with nothing."""
    lost = Counts(bids=20, losses=20)
    assert saw(facts(HOURS, lambda _: lost, lambda _: USUAL, IN_AN_HOUR), "clearing_price") is None


@pytest.mark.parametrize(
    ("spent", "fires"),
    [(30_000_000, True), (29_000_000, False), (3_200_000, True), (3_400_000, False), (0, True)],
)
def test_spending_is_far_from_three_times_or_a_third_on(spent: int, fires: bool) -> None:
    """An hour spends 600 million nanos as a rule; its window holds the sums of 61 minutes."""
    last = USUAL._replace(spent=spent)
    known = facts(HOURS, last=lambda _: last, of_last=IN_AN_HOUR)
    assert (saw(known, "spend_speed") is not None) is fires


def test_a_shorter_window_is_held_against_its_share_of_an_hour() -> None:
    """A quarter of what an hour spends: 150 million nanos are 0.15 EUR."""
    last = USUAL._replace(spent=60_000_000)
    known = facts(HOURS, last=lambda _: last, of_last=IN_AN_HOUR)
    found = saw(known, "spend_speed", window_ms=15 * MINUTE_MS)
    assert found is not None
    assert found.sentence == "0.96 EUR spent in 15 minutes; usually 0.15 EUR"
    assert found.numbers == {"spent_nanos": 960_000_000, "usual_nanos": 150_000_000}


def test_no_bids_are_no_slow_spending() -> None:
    """Who bids nothing spends nothing, and that is no fault of the spending."""
    quiet = facts(HOURS, last=lambda _: NOTHING, of_last=IN_AN_HOUR)
    assert saw(quiet, "spend_speed") is None
    assert saw(quiet, "clearing_price") is None


@pytest.mark.parametrize(
    ("rule", "said"),
    [
        ("unfunded", "0.000001 EUR of cost found no free money"),
        ("disputed", "0.000001 EUR was asked above what was bid"),
    ],
)
def test_bare_money_is_told_since_it_last_grew(rule: str, said: str) -> None:
    """By minutes where they show it, else by hours, else by days, else since now."""
    grown = Counts(bids=1, **{rule: 1000})
    last = lambda n: grown if n == 400 else USUAL  # noqa: E731
    bare: dict[str, Any] = {rule: 1000}
    known = facts(HOURS, last=last, of_last=100, **bare)
    found = saw(known, rule)
    assert found == Saw(said, {f"{rule}_nanos": 1000}, 400 * MINUTE_MS)
    widths = [(known.minutes, 360 * MINUTE_MS), (known.hours, 0), (known.days, known.now_ms)]
    for series, since_ms in widths:
        series.starts, series.buckets = [], []
        later = saw(known, rule)
        assert later is not None
        assert later.since_ms == since_ms


@pytest.mark.parametrize("rule", ["unfunded", "disputed"])
@pytest.mark.parametrize("nanos", [0, -5])
def test_no_bare_money_is_no_finding(rule: str, nanos: int) -> None:
    """Nor is less than none, as a replay may reckon back."""
    bare: dict[str, Any] = {rule: nanos}
    assert saw(facts(60, **bare), rule) is None


@pytest.mark.parametrize(
    ("halted_minute", "window_ms", "halted_s"),
    [(479, MINUTE_MS, None), (478, MINUTE_MS, 119), (478, 2 * MINUTE_MS, None), (479, 0, 59)],
)
def test_a_halt_is_told_when_it_has_lasted(
    halted_minute: int, window_ms: int, halted_s: int | None
) -> None:
    """A refold takes seconds, so that only what lasts a whole window is told."""
    halted = USUAL._replace(halted=1)
    last = lambda n: halted if n == halted_minute else USUAL  # noqa: E731
    known = facts(HOURS, last=last, of_last=5, halted=True)
    found = saw(known, "learner_halted", window_ms=window_ms)
    assert (found.numbers["halted_s"] if found else None) == halted_s


def test_a_learner_that_goes_on_is_no_finding() -> None:
    """However often it was halted in between."""
    halted = USUAL._replace(halted=1)
    known = facts(HOURS, last=lambda _: halted, of_last=30, halted=False)
    assert saw(known, "learner_halted") is None


def test_a_growth_after_the_moment_is_not_seen_yet() -> None:
    """Buckets that begin later are behind the end of every window."""
    later = Series(MINUTE_MS, [(0, Counts(unfunded=5)), (10 * MINUTE_MS, Counts(unfunded=5))])
    none = Series(HOUR_MS, []), Series(DAY_MS, [])
    known = Facts(5 * MINUTE_MS, later, none[0], none[1], "once", "EUR", unfunded=5)
    found = saw(known, "unfunded")
    assert found is not None
    assert found.since_ms == 0
