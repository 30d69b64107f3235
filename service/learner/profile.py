"""How much of a budget is due by when, in the line item's own hours, apart from the multiplier.

A day's money lies over its local hours by weight. What is due between two moments is the money
left times their weight over the weight of the rest of the day, so the plan is made anew with
every entry: what was not spent is due later, and what was overspent is taken off later.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from functools import lru_cache
from itertools import accumulate
from zoneinfo import ZoneInfo

from service.learner.sealed import sealed, unsealed

HOURS = 24
FLAT = (1,) * HOURS
# Zones shift by whole quarters of an hour, so one local hour holds for each of them.
QUARTER_MS = 15 * 60 * 1000
# After a longer silence nothing more is due: an outage of the caller is no thrift of ours.
# What it left unspent is due in the rest of the day, as the plan is made anew.
SILENCE_MS = QUARTER_MS
WEIGHT_MAX = 10**6
QUARTERS_MAX = 4 * (HOURS + 24)  # Zones that crossed the date line had days of 48 hours.
FORM = 1

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
# name, form, clock, spent today, spent in all
_STATE = struct.Struct(">3sBqqq")
_NAME = b"pln"


class BadProfile(ValueError):
    """The weights are no profile of a day."""


class UnreadableProgress(ValueError):
    """The bytes are not a progress of the form we write."""


@dataclass(frozen=True, slots=True)
class Plan:
    """
    What may be spent and when; money in nanos.

    Args:
        zone: Name of the time zone whose days and hours count.
        weights: Share of spend for each local hour from 0 to 23, as whole numbers of any one
            unit. An hour that the clocks repeat counts twice, one that they skip not at all.
        daily: Money for each local day; None for no limit.
        total: Money for the whole flight; None for no limit.
        ends_ms: End of the flight; None when it has none.

    Raises:
        BadProfile: Not 24 whole weights from 0 to a million, or all of them 0.
    """

    zone: str
    weights: tuple[int, ...] = FLAT
    daily: int | None = None
    total: int | None = None
    ends_ms: int | None = None

    def __post_init__(self) -> None:
        fits = all(0 <= weight <= WEIGHT_MAX for weight in self.weights)
        if len(self.weights) != HOURS or not fits or not any(self.weights):
            raise BadProfile("24 whole weights from 0 to a million, not all 0")

    @property
    def paces(self) -> bool:
        """Whether there is a rate at all: a daily budget, or a total one with an end."""
        return self.daily is not None or (self.total is not None and self.ends_ms is not None)


@dataclass(frozen=True, slots=True)
class Progress:
    """
    Spend as the stream has it.

    Args:
        clock_ms: Time of the last entry.
        today: Nanos spent in its local day.
        total: Nanos spent in all.
    """

    clock_ms: int
    today: int = 0
    total: int = 0

    def to_bytes(self) -> bytes:
        """Equal progress gives equal bytes."""
        body = _STATE.pack(_NAME, FORM, self.clock_ms, self.today, self.total)
        return sealed(body)

    @staticmethod
    def from_bytes(state: bytes) -> Progress:
        """
        Read what `to_bytes` wrote.

        Raises:
            UnreadableProgress: Another form, or not whole.
        """
        body, sound = unsealed(state)
        if len(body) != _STATE.size or body[:4] != _NAME + bytes([FORM]):
            raise UnreadableProgress("not the form of progress this release writes")
        if not sound:
            raise UnreadableProgress("damaged")
        return Progress(*_STATE.unpack(body)[2:])


def advance(progress: Progress, at_ms: int, spent: int, plan: Plan) -> tuple[Progress, int]:
    """
    Count one entry; returns the progress after it and what became due since the one before.

    Args:
        progress: So far.
        at_ms: Time of the entry; an earlier one than the last counts as the last.
        spent: Nanos the entry says were paid; they belong to the day of the entry.
        plan: What may be spent and when.
    """
    at_ms = max(at_ms, progress.clock_ms)
    from_ms = max(progress.clock_ms, at_ms - SILENCE_MS)
    now, due = _moved(progress, from_ms, plan), 0
    _, ends_ms = day_of(from_ms, plan.zone)
    if ends_ms <= at_ms:  # Midnight lies between the two entries.
        due = due_between(now, from_ms, ends_ms, plan)
        now, from_ms = _moved(now, ends_ms, plan), ends_ms
    due += due_between(now, from_ms, at_ms, plan)
    return Progress(at_ms, now.today + spent, now.total + spent), due


def due_between(progress: Progress, from_ms: int, to_ms: int, plan: Plan) -> int:
    """Nanos due between two moments of one local day, of the money that is left now."""
    _, ends_ms = day_of(from_ms, plan.zone)
    rest = weight_between(from_ms, _end(ends_ms, plan), plan)
    if rest == 0:
        return 0
    return left_today(progress, from_ms, plan) * weight_between(from_ms, to_ms, plan) // rest


def left_today(progress: Progress, at_ms: int, plan: Plan) -> int:
    """
    Nanos to be spent in what remains of the day: what both budgets leave for it.

    Of a total budget whose flight ends, the day's part is by weight; of one without end, all.
    """
    _, ends_ms = day_of(at_ms, plan.zone)
    limits = []
    if plan.daily is not None:
        limits.append(plan.daily - progress.today)
    if plan.total is not None:
        limits.append(_of_total(plan.total - progress.total, at_ms, ends_ms, plan))
    return max(min(limits, default=0), 0)


def weight_between(from_ms: int, to_ms: int, plan: Plan) -> int:
    """The weight of a span before the flight ends, each millisecond with that of its hour."""
    to_ms = _end(to_ms, plan)
    starts_ms, ends_ms = day_of(from_ms, plan.zone)
    if to_ms <= from_ms:
        return 0
    day = (starts_ms, plan.zone, plan.weights)
    weight = _until(min(to_ms, ends_ms), *day) - _until(from_ms, *day)
    return weight + _after(ends_ms, to_ms, plan.zone, plan.weights)


def day_of(at_ms: int, zone: str) -> tuple[int, int]:
    """The moments at which the local day of this one begins and ends."""
    today = _local(at_ms, zone).date()
    starts_ms, ends_ms = _begins(today, zone), _begins(today + timedelta(days=1), zone)
    if ends_ms <= at_ms:  # Its midnight comes twice, and this is the day taken up again.
        ends_ms = _begins(today + timedelta(days=1), zone, fold=1)
    return starts_ms, ends_ms


@lru_cache(maxsize=4096)
def _begins(day: date, zone: str, fold: int = 0) -> int:
    # A midnight that the clocks jump over maps to the jump.
    midnight = datetime(day.year, day.month, day.day, tzinfo=ZoneInfo(zone), fold=fold)
    return (midnight.astimezone(UTC) - _EPOCH) // timedelta(milliseconds=1)


def _until(at_ms: int, starts_ms: int, zone: str, weights: tuple[int, ...]) -> int:
    quarter, part_ms = divmod(at_ms - starts_ms, QUARTER_MS)
    sums = _sums(starts_ms, zone, weights)
    # A day with every quarter there can be has none after its last.
    part = (sums[quarter + 1] - sums[quarter]) * part_ms if part_ms else 0
    return sums[quarter] * QUARTER_MS + part


@lru_cache(maxsize=1024)
def _sums(starts_ms: int, zone: str, weights: tuple[int, ...]) -> tuple[int, ...]:
    """Sum of the weights of the quarters of an hour from a moment on, for any day's length."""
    hours = (_local(starts_ms + at * QUARTER_MS, zone).hour for at in range(QUARTERS_MAX))
    return tuple(accumulate((weights[hour] for hour in hours), initial=0))


@lru_cache(maxsize=4096)
def _after(from_ms: int, to_ms: int, zone: str, weights: tuple[int, ...]) -> int:
    """The weight of the days from the start of one on."""
    weight = 0
    while from_ms < to_ms:
        _, ends_ms = day_of(from_ms, zone)
        weight += _until(min(to_ms, ends_ms), from_ms, zone, weights)
        from_ms = ends_ms
    return weight


def _moved(progress: Progress, to_ms: int, plan: Plan) -> Progress:
    _, ends_ms = day_of(progress.clock_ms, plan.zone)
    return Progress(to_ms, progress.today if to_ms < ends_ms else 0, progress.total)


def _of_total(left: int, at_ms: int, ends_ms: int, plan: Plan) -> int:
    if plan.ends_ms is None:
        return left
    rest = weight_between(at_ms, plan.ends_ms, plan)
    return left * weight_between(at_ms, ends_ms, plan) // rest if rest else 0


def _end(to_ms: int, plan: Plan) -> int:
    return to_ms if plan.ends_ms is None else min(to_ms, plan.ends_ms)


def _local(at_ms: int, zone: str) -> datetime:
    return (_EPOCH + timedelta(milliseconds=at_ms)).astimezone(ZoneInfo(zone))
