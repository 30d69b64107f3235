"""What is due by when: worked days of 23, 24 and 25 hours, both budgets, and replanning."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.profile import (
    FLAT,
    SILENCE_MS,
    BadProfile,
    Plan,
    Progress,
    UnreadableProgress,
    advance,
    day_of,
    due_between,
    left_today,
    weight_between,
)

HOUR_MS = 3_600_000
ZURICH = "Europe/Zurich"
MONEY = 24_000 * 10**9
# Mornings weigh one, afternoons three.
SHAPE = (1,) * 12 + (3,) * 12


def moment(
    year: int, month: int, day: int, hour: int = 0, zone: str = ZURICH, fold: int = 0
) -> int:
    """A local time as milliseconds."""
    local = datetime(year, month, day, hour, tzinfo=ZoneInfo(zone), fold=fold)
    return (local.astimezone(UTC) - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(milliseconds=1)


NOON = moment(2026, 6, 10, 12)


@pytest.mark.parametrize(
    ("day", "zone", "hours"),
    [
        ((2026, 6, 10), ZURICH, 24),
        ((2026, 3, 29), ZURICH, 23),
        ((2026, 10, 25), ZURICH, 25),
        ((2018, 11, 4), "America/Sao_Paulo", 23),  # Its midnight does not exist.
        ((2026, 11, 1), "America/Havana", 25),  # Its midnight comes twice.
        ((2026, 10, 4), "Australia/Lord_Howe", 23.5),
        ((2026, 6, 10), "Asia/Kathmandu", 24),
    ],
)
def test_a_day_is_as_long_as_its_zone_says(
    day: tuple[int, int, int], zone: str, hours: float
) -> None:
    """And its flat weight is its hours."""
    starts_ms, ends_ms = day_of(moment(*day, 15, zone), zone)

    assert ends_ms - starts_ms == hours * HOUR_MS
    assert day_of(starts_ms, zone) == day_of(ends_ms - 1, zone) == (starts_ms, ends_ms)
    assert day_of(ends_ms, zone)[0] == ends_ms
    assert weight_between(starts_ms, ends_ms, Plan(zone)) == hours * HOUR_MS


def test_a_skipped_hour_has_no_weight_and_a_repeated_one_has_it_twice() -> None:
    """With all weight on the hour from two to three, in spring, in summer and in autumn."""
    plan = Plan(ZURICH, (0, 0, 1) + (0,) * 21)
    weights = [
        weight_between(*day_of(moment(*day, 15), ZURICH), plan) / HOUR_MS
        for day in [(2026, 3, 29), (2026, 6, 10), (2026, 10, 25)]
    ]
    assert weights == [0, 1, 2]


def test_a_day_taken_up_again_ends_the_second_time() -> None:
    """Where clocks went back across midnight, no moment lies after the end of its day."""
    zone = "America/St_Johns"
    jump = moment(2010, 11, 7, 0, zone)
    for minutes in range(-90, 120):
        at_ms = jump + minutes * 60_000
        assert at_ms < day_of(at_ms, zone)[1]


def test_what_is_due_follows_the_weights() -> None:
    """A quarter in the morning, three in the afternoon, and all of it by midnight."""
    plan = Plan(ZURICH, SHAPE, daily=MONEY)
    starts_ms, ends_ms = day_of(NOON, ZURICH)
    fresh = Progress(starts_ms)

    assert due_between(fresh, starts_ms, NOON, plan) == MONEY // 4
    assert due_between(fresh, starts_ms, ends_ms, plan) == MONEY
    assert due_between(fresh, NOON, ends_ms, plan) == MONEY


def test_what_was_not_spent_is_due_later() -> None:
    """At noon with nothing spent the afternoon's hours get a third more; overspent, less."""
    plan = Plan(ZURICH, SHAPE, daily=MONEY)
    an_hour = [
        due_between(Progress(NOON, today=spent), NOON, NOON + HOUR_MS, plan)
        for spent in (0, MONEY // 4, MONEY // 2, MONEY, 2 * MONEY)
    ]
    assert an_hour == [MONEY // 12, MONEY // 16, MONEY // 24, 0, 0]


def test_both_budgets_hold_together() -> None:
    """The day gets the lesser of the daily budget and its part of what is left in all."""
    starts_ms, _ = day_of(NOON, ZURICH)
    ends_ms = moment(2026, 6, 14)
    plan = Plan(ZURICH, SHAPE, MONEY, 8 * MONEY, ends_ms)

    assert left_today(Progress(starts_ms), starts_ms, plan) == MONEY
    assert left_today(Progress(starts_ms, 0, 6 * MONEY), starts_ms, plan) == MONEY // 2
    assert left_today(Progress(NOON, MONEY // 8, 6 * MONEY), NOON, plan) == 2 * MONEY * 3 // 15
    assert left_today(Progress(NOON, MONEY, MONEY), NOON, plan) == 0
    endless = replace(plan, ends_ms=None)
    assert left_today(Progress(NOON, 0, 8 * MONEY - 7), NOON, endless) == 7
    assert [replace(plan, daily=None).paces, replace(endless, daily=None).paces] == [True, False]


def test_a_flight_that_ends_in_the_day_spends_by_then() -> None:
    """With six hours left of the flight, all that is left is due in them."""
    plan = Plan(ZURICH, FLAT, 9 * MONEY, MONEY, NOON + 6 * HOUR_MS)
    due = [due_between(Progress(NOON), NOON, NOON + h * HOUR_MS, plan) for h in (3, 6, 9)]

    assert due == [MONEY // 2, MONEY, MONEY]
    assert due_between(Progress(NOON), NOON + 7 * HOUR_MS, NOON + 8 * HOUR_MS, plan) == 0


def test_spending_what_is_due_spends_the_budget() -> None:
    """Four days of entries a minute apart, over each change of clocks: the daily money."""
    for month, day in [(3, 27), (10, 23)]:
        plan = Plan(ZURICH, SHAPE, daily=MONEY)
        progress, spent = Progress(moment(2026, month, day)), list[int]()
        for at_ms in range(progress.clock_ms, moment(2026, month, day + 4) + 1, 60_000):
            before, due = progress.today, 0
            progress, due = advance(progress, at_ms, 0, plan)
            if progress.today < before or (progress.today == 0 and before):
                spent.append(before + due)
            progress = replace(progress, today=progress.today + due, total=progress.total + due)
        assert spent == pytest.approx([MONEY] * 4, rel=2e-3)


def test_midnight_between_two_entries_begins_a_new_day() -> None:
    """Both sides of it are due from their own day's money, and today's spend begins at 0."""
    _, midnight = day_of(NOON, ZURICH)
    plan = Plan(ZURICH, FLAT, daily=MONEY)
    before = Progress(midnight - 60_000, today=MONEY - 500, total=MONEY)

    after, due = advance(before, midnight + 60_000, 7, plan)

    assert after == Progress(midnight + 60_000, 7, MONEY + 7)
    assert due == 500 + MONEY // (24 * 60)


def test_a_long_silence_owes_little() -> None:
    """After hours without an entry a quarter of an hour is due, of what the hours then get."""
    plan = Plan(ZURICH, FLAT, daily=MONEY)
    after, due = advance(Progress(NOON, MONEY // 2, MONEY), NOON + 6 * HOUR_MS, 0, plan)
    rest_ms = 6 * HOUR_MS + SILENCE_MS

    assert after.today == MONEY // 2
    assert due == MONEY // 2 * SILENCE_MS // rest_ms
    days_later, _ = advance(after, NOON + 96 * HOUR_MS, 3, plan)
    assert days_later == Progress(NOON + 96 * HOUR_MS, 3, MONEY + 3)


def test_an_entry_of_an_earlier_time_counts_as_the_last() -> None:
    """The clock never goes back; the money is counted."""
    after, due = advance(Progress(NOON), NOON - 5, 9, Plan(ZURICH, daily=MONEY))
    assert (after, due) == (Progress(NOON, 9, 9), 0)


@given(
    some.lists(some.tuples(some.integers(0, 40 * HOUR_MS), some.integers(0, MONEY)), max_size=20)
)
def test_never_more_is_due_than_both_budgets_leave(entries: list[tuple[int, int]]) -> None:
    """Whatever is spent when: what is due is at most today's money, and never below 0."""
    plan = Plan(ZURICH, SHAPE, MONEY, 3 * MONEY, NOON + 500 * HOUR_MS)
    progress = Progress(NOON)
    for wait_ms, spent in entries:
        left = max(3 * MONEY - progress.total, 0)
        progress, due = advance(progress, progress.clock_ms + wait_ms, spent, plan)
        assert 0 <= due <= min(left, 2 * MONEY)
    assert Progress.from_bytes(progress.to_bytes()) == progress


@pytest.mark.parametrize("weights", [(1,) * 23, (0,) * 24, (-1,) + (1,) * 23, (10**6 + 1,) * 24])
def test_a_profile_that_is_none_is_refused(weights: tuple[int, ...]) -> None:
    """24 whole weights, none below 0, at least one above."""
    with pytest.raises(BadProfile):
        Plan(ZURICH, weights)


def test_damaged_bytes_are_refused() -> None:
    """Each byte changed, and other lengths."""
    state = Progress(NOON, 5, 2**61).to_bytes()
    spoilt = [state[:at] + bytes([state[at] ^ 4]) + state[at + 1 :] for at in range(len(state))]
    for wrong in (*spoilt, state[:-1], b"", state + b"\0"):
        with pytest.raises(UnreadableProgress):
            Progress.from_bytes(wrong)
