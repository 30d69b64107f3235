"""What a line item usually does: which stretches of its own past a window is held against.

Apart from the rules, which all ask the same. Hours are compared with the same hour of earlier
days where there are enough of them, else with any hour, else with the windows just before.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from service.tripwires.counts import Counts, Series, plus
from service.tripwires.tails import Pair

HOURS_A_DAY = 24  # Coarse buckets in a day; in a drill both are shorter.
SAME_HOURS_MIN = 5
STRETCHES_MIN = 4
STRETCHES_MAX = 24
ANY_HOURS_MAX = 48
DAYS_MAX = 35
LONG_HOURS = 6  # Windows of so many hours begin with an hour, so that their minutes may be gone.


@dataclass(frozen=True, slots=True)
class Facts:
    """
    Everything the rules may know of one line item at one moment; money in nanos.

    Args:
        minutes, hours, days: Its buckets, each 60 and 24 times as wide as the one before.
        unfunded: Cost that found no free money; `disputed` asked more than was bid.
        halted: Whether its learner is halted.
    """

    now_ms: int
    minutes: Series
    hours: Series
    days: Series
    arrival: str
    currency: str
    unfunded: int = 0
    disputed: int = 0
    halted: bool = False

    def start_ms(self, window_ms: int) -> int:
        """When the window that ends now begins."""
        long = window_ms >= LONG_HOURS * self.hours.span_ms
        return (self.hours if long else self.minutes).floor(self.now_ms - window_ms)

    def window(self, window_ms: int) -> Counts:
        """What happened in the window that ends now."""
        return self.until(self.start_ms(window_ms), self.now_ms + 1)

    def until(self, start_ms: int, end_ms: int) -> Counts:
        """What happened in a stretch that begins where a window does."""
        if self.now_ms - start_ms < LONG_HOURS * self.hours.span_ms:
            return self.minutes.between(start_ms, end_ms)
        hour = self.hours.floor(min(self.now_ms, end_ms))
        return plus(self.hours.between(start_ms, hour), self.minutes.between(hour, end_ms))


@dataclass(frozen=True, slots=True)
class Past:
    """Earlier stretches of one length in which bids went out."""

    stretches: Sequence[Counts]
    span_ms: int

    def pairs(self, count: Callable[[Counts], int], of: Callable[[Counts], int]) -> list[Pair]:
        """A count and its trials in each stretch that has any trials."""
        return [(count(one), of(one)) for one in self.stretches if of(one) > 0]


def past(facts: Facts, window_ms: int) -> Past | None:
    """What a window is held against; None while there is too little of it."""
    start = facts.start_ms(window_ms)
    days = facts.days
    # Half a day has busy and quiet hours in it, so that only whole days are its like.
    if window_ms >= days.span_ms // 2:
        return _enough(_buckets(days, start - days.span_ms, DAYS_MAX), days.span_ms, STRETCHES_MIN)
    hours = facts.hours
    same = _same_hours(facts, start, window_ms)
    found = _enough(same, hours.span_ms, SAME_HOURS_MIN)
    if found is None:
        any_hours = _buckets(hours, start - hours.span_ms, ANY_HOURS_MAX)
        found = _enough(any_hours, hours.span_ms, STRETCHES_MIN)
    if found is None and window_ms < hours.span_ms:
        found = _enough(_windows_before(facts, start, window_ms), window_ms, STRETCHES_MIN)
    return found


def _enough(stretches: list[Counts], span_ms: int, least: int) -> Past | None:
    return Past(stretches, span_ms) if len(stretches) >= least else None


def _buckets(series: Series, last_ms: int, most: int) -> list[Counts]:
    """The newest buckets that begin by then; the first of all may be a part of one."""
    newest = series.buckets[1 : max(1, bisect_right(series.starts, last_ms))][-most:]
    return [counts for counts in newest if counts.bids > 0]


def _same_hours(facts: Facts, start_ms: int, window_ms: int) -> list[Counts]:
    hours = facts.hours
    if not hours.starts:
        return []
    day_ms = HOURS_A_DAY * hours.span_ms
    # The hour of the window's middle: at 14:05 an hour's window is nearly all of 13 o'clock.
    newest = hours.floor(facts.now_ms - min(window_ms, hours.span_ms) // 2)
    starts = [newest - number * day_ms for number in range(1, DAYS_MAX + 1)]
    last, first = start_ms - hours.span_ms, hours.starts[0]
    found = [hours.at(start) for start in starts if first < start <= last]
    return [counts for counts in found if counts.bids > 0]


def _windows_before(facts: Facts, start_ms: int, window_ms: int) -> list[Counts]:
    minutes = facts.minutes
    if not minutes.starts:
        return []
    ends = [start_ms - number * window_ms for number in range(STRETCHES_MAX)]
    # A window that begins before the first record would be a part of one.
    whole = [end for end in ends if end - window_ms >= minutes.starts[0]]
    windows = [minutes.between(end - window_ms, end) for end in reversed(whole)]
    return [counts for counts in windows if counts.bids > 0]
