"""Windows and what they are held against, worked out by the clock and on records of our own."""

from __future__ import annotations

from collections.abc import Sequence

import pytest

from service.tripwires.counts import NOTHING, Counts, Series
from service.tripwires.history import (
    ANY_HOURS_MAX,
    DAYS_MAX,
    SAME_HOURS_MIN,
    STRETCHES_MAX,
    STRETCHES_MIN,
    Facts,
    Past,
    past,
)
from tests.tripwires.recorded import DAY_MS, HOUR_MS, MINUTE_MS, USUAL, facts

SECOND_MS = 1000
Numbers = Sequence[int]
# A day and 10:17:30, one millisecond after 24 buckets of an hour have been closed and ten more.
NOW_MS = DAY_MS + 10 * HOUR_MS + 17 * MINUTE_MS + 30 * SECOND_MS


def at(now_ms: int, minutes: Numbers = (), hours: Numbers = (), days: Numbers = ()) -> Facts:
    """Buckets that begin at these numbers of their width, the n-th with 1 + n bids."""
    rows = [
        Series(width, [(n * width, Counts(1 + n)) for n in numbers])
        for width, numbers in ((MINUTE_MS, minutes), (HOUR_MS, hours), (DAY_MS, days))
    ]
    return Facts(now_ms, rows[0], rows[1], rows[2], "once", "EUR")


def bids(found: Past | None) -> list[int]:
    """How many bids each stretch had; by them our stretches are told apart."""
    return [] if found is None else [one.bids for one in found.stretches]


@pytest.mark.parametrize(
    ("window_ms", "start"),
    [
        (MINUTE_MS, "10:16"),
        (15 * MINUTE_MS, "10:02"),
        (HOUR_MS, "9:17"),
        (6 * HOUR_MS - 1, "4:17"),
        (6 * HOUR_MS, "4:00"),
        (10 * HOUR_MS, "0:00"),
    ],
)
def test_a_window_begins_with_a_minute_and_a_long_one_with_an_hour(
    window_ms: int, start: str
) -> None:
    """At 10:17:30; from six hours on minutes may be forgotten, so that hours must do."""
    hour, minute = (int(part) for part in start.split(":"))
    assert at(NOW_MS).start_ms(window_ms) == DAY_MS + hour * HOUR_MS + minute * MINUTE_MS


def test_a_window_holds_the_bucket_that_has_just_begun() -> None:
    """And not the one a millisecond later."""
    known = at(10 * MINUTE_MS, minutes=[8, 9, 10, 11])
    assert known.window(MINUTE_MS).bids == 10 + 11
    assert at(10 * MINUTE_MS - 1, minutes=[8, 9, 10]).window(MINUTE_MS).bids == 9 + 10


def test_a_long_window_takes_whole_hours_and_the_minutes_of_this_one() -> None:
    """From 4:00 to 10:17 hours 4 to 9 and the minutes since 10:00; earlier minutes count once."""
    hour_of_day, minute_of_day = 24, 24 * 60
    hours = [hour_of_day + n for n in range(11)]
    minutes = [minute_of_day + n for n in range(9 * 60, 10 * 60 + 18)]
    known = at(NOW_MS, minutes, hours)
    wanted = sum(1 + hour_of_day + n for n in range(4, 10))
    wanted += sum(1 + minute_of_day + n for n in range(10 * 60, 10 * 60 + 18))
    assert known.window(6 * HOUR_MS).bids == wanted
    bare = at(NOW_MS, [n for n in minutes if n >= minute_of_day + 600], hours)
    assert bare.window(6 * HOUR_MS) == known.window(6 * HOUR_MS)


def test_the_first_part_of_a_long_window_is_cut_at_a_minute() -> None:
    """From 4:00 to before 7:30: three hours, and thirty minutes of the fourth."""
    hours = [24 + n for n in range(4, 11)]
    minutes = [24 * 60 + 7 * 60 + n for n in range(60)]
    known = at(NOW_MS, minutes, hours)
    start = known.start_ms(6 * HOUR_MS)
    found = known.until(start, start + 3 * HOUR_MS + 30 * MINUTE_MS)
    assert found.bids == sum(1 + n for n in hours[:3]) + sum(1 + n for n in minutes[:30])


def test_a_line_item_without_a_record_has_neither_window_nor_past() -> None:
    """On its first day, at every length of window."""
    for window_ms in (MINUTE_MS, HOUR_MS, 6 * HOUR_MS, DAY_MS):
        known = at(NOW_MS)
        assert (known.window(window_ms), past(known, window_ms)) == (NOTHING, None)


@pytest.mark.parametrize(("days", "stretches"), [(6, []), (7, [2, 3, 4, 5])])
def test_a_window_of_a_day_is_held_against_days(days: int, stretches: list[int]) -> None:
    """Neither the first, which may be a part, nor those the window touches; four at least."""
    known = at(days * DAY_MS - 1, days=list(range(days)))
    found = past(known, DAY_MS)
    assert bids(found) == stretches
    assert found is None or found.span_ms == DAY_MS


def test_no_more_days_are_looked_at_than_five_weeks() -> None:
    """The newest of them."""
    known = at(60 * DAY_MS - 1, days=list(range(60)))
    assert bids(past(known, DAY_MS)) == list(range(58 - DAYS_MAX + 1, 59))


def test_half_a_day_is_long_enough_for_days() -> None:
    """A window of twelve hours is held against days, one of less against hours."""
    known = at(9 * DAY_MS - 1, hours=list(range(9 * 24)), days=list(range(9)))
    found = [past(known, window_ms) for window_ms in (12 * HOUR_MS, 12 * HOUR_MS - 1)]
    assert [one.span_ms for one in found if one is not None] == [DAY_MS, HOUR_MS]


def test_an_hour_is_held_against_the_same_hour_of_earlier_days() -> None:
    """At 12:59 on the seventh day: noon of days 1 to 6, newest first; here day 0 has noon too."""
    now_ms = 6 * DAY_MS + 13 * HOUR_MS - 1
    known = at(now_ms, hours=list(range(6 * 24 + 13)))
    wanted = [1 + 24 * day + 12 for day in (5, 4, 3, 2, 1, 0)]
    assert bids(past(known, HOUR_MS)) == wanted


def test_the_very_first_hour_is_never_a_stretch() -> None:
    """It began somewhere inside; of the others at this hour there must be five."""
    now_ms = SAME_HOURS_MIN * DAY_MS + HOUR_MS - 1
    hours = [24 * day for day in range(SAME_HOURS_MIN)]
    assert past(at(now_ms, hours=hours), HOUR_MS) is not None
    assert bids(past(at(now_ms, hours=hours), HOUR_MS)) == [25, 49, 73, 97]
    earlier = past(at(now_ms, hours=[*hours, -1]), HOUR_MS)
    assert bids(earlier) == [97, 73, 49, 25, 1]


def test_without_enough_same_hours_any_hour_will_do() -> None:
    """The newest two days of them, none that the window touches."""
    known = at(4 * DAY_MS - 1, hours=list(range(4 * 24)))
    # The window began at 22:59, so the hour from 21:00 on is the last whole one before it.
    newest = 3 * 24 + 21
    wanted = [1 + n for n in range(newest - ANY_HOURS_MAX + 1, newest + 1)]
    assert bids(past(known, HOUR_MS)) == wanted


def test_a_young_line_item_is_held_against_the_windows_before() -> None:
    """A quarter of an hour against earlier quarters, oldest first, as many as are whole."""
    known = at(100 * MINUTE_MS - 1, minutes=list(range(100)))
    found = past(known, 15 * MINUTE_MS)
    assert found is not None
    # The window began with minute 84; five more quarters lie behind minute 9.
    starts = [9, 24, 39, 54, 69]
    assert bids(found) == [sum(1 + n for n in range(s, s + 15)) for s in starts]
    assert found.span_ms == 15 * MINUTE_MS


def test_too_few_windows_before_are_no_past() -> None:
    """Three quarters are too few, four are enough."""
    few = at(75 * MINUTE_MS - 1, minutes=list(range(75)))
    assert past(few, 15 * MINUTE_MS) is None
    enough = at(76 * MINUTE_MS - 1, minutes=list(range(76)))
    assert len(bids(past(enough, 15 * MINUTE_MS))) == STRETCHES_MIN


def test_no_more_windows_before_are_looked_at_than_a_bound() -> None:
    """However many minutes there are, while hours are still too few."""
    known = at(400 * MINUTE_MS - 1, minutes=list(range(400)))
    assert len(bids(past(known, 5 * MINUTE_MS))) == STRETCHES_MAX


def test_stretches_without_bids_say_nothing() -> None:
    """A night or a freeze is no past; it neither counts nor fills one of the places."""

    def usual(minute: int) -> Counts:
        return NOTHING if minute // 60 % 2 else USUAL

    known = facts(16 * 60, usual)
    found = past(known, HOUR_MS)
    assert found is not None
    assert bids(found) == [1200] * 6
    assert past(facts(16 * 60, lambda _: NOTHING), HOUR_MS) is None


@pytest.mark.parametrize("scale", [1, 60])
def test_a_drill_in_short_minutes_sees_the_same_past(scale: int) -> None:
    """All widths shrink together, so that a drill judges as a day would."""
    now_ms = (9 * DAY_MS + 13 * HOUR_MS - 1) // scale
    rows = [
        Series(width // scale, [(n * width // scale, Counts(1 + n)) for n in range(count)])
        for width, count in ((MINUTE_MS, 9 * 1440 + 780), (HOUR_MS, 9 * 24 + 13), (DAY_MS, 10))
    ]
    known = Facts(now_ms, rows[0], rows[1], rows[2], "once", "EUR")
    assert bids(past(known, HOUR_MS // scale)) == [1 + 24 * day + 12 for day in range(8, -1, -1)]
    assert bids(past(known, DAY_MS // scale)) == [2, 3, 4, 5, 6, 7, 8]


def test_pairs_leave_out_what_had_no_trials() -> None:
    """A share of nothing is no share."""
    found = Past([Counts(wins=1, losses=3), Counts(bids=5), Counts(losses=2)], HOUR_MS)
    assert found.pairs(lambda c: c.wins, lambda c: c.results) == [(1, 4), (0, 2)]
    assert found.pairs(lambda c: c.wins, lambda c: c.words) == []
