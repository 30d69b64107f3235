"""Rules on what impressions bring: how many values, how large, zeros, and values never heard of."""

from __future__ import annotations

import math
from collections.abc import Callable

from service.tripwires.counts import LOG_UNITS, Counts
from service.tripwires.history import Facts, Past, past
from service.tripwires.saying import Saw, chance, duration, share
from service.tripwires.setups import Setup
from service.tripwires.tails import (
    Pair,
    poisson_at_most,
    rates_tail,
    shares_tail,
    spread_of_rates,
    student_two_sided,
)

HISTORY_MIN = 20  # Fewer values than this have no usual size.
# ln units: values that were always alike may still move by a twentieth.
SPREAD_MIN = 0.05
ONCE = "once"
PARTS = (12, 4, 1)  # Of a window, that are looked at besides the whole.


def value_count(facts: Facts, setup: Setup) -> Saw | None:
    """Values come far more or less often than the line item's own wins let expect."""
    window_ms, ratio = setup.window_ms or 0, setup.ratio or 1.0
    now, before = facts.window(window_ms), past(facts, window_ms)
    pairs = before.pairs(lambda c: c.conversions, lambda c: c.wins) if before else []
    if not pairs or now.wins <= 0:
        return None
    expected = now.wins * sum(k for k, _ in pairs) / sum(n for _, n in pairs)
    if max(now.conversions, expected) < (setup.count_min or 1):
        return None
    upper = now.conversions > expected
    off = now.conversions >= ratio * expected if upper else now.conversions <= expected / ratio
    tail = rates_tail((now.conversions, now.wins), pairs, upper=upper)
    if not off or tail > (setup.alpha or 0.0):
        return None
    return Saw(
        f"{now.conversions} values above 0 in {duration(window_ms)}; {expected:.1f} were to be"
        f" expected of {now.wins} wins; by chance {chance(tail)}",
        {"values": now.conversions, "expected": round(expected, 3), "wins": now.wins},
        facts.start_ms(window_ms),
    )


def value_size(facts: Facts, setup: Setup) -> Saw | None:
    """A value is usually far larger or smaller than values used to be."""
    before = past(facts, setup.window_ms or 0)
    size = None if before is None else _Sizes.of(before)
    if size is None:
        return None
    return _first(
        facts, setup, lambda window_ms, alpha: _sized(facts, setup, size, window_ms, alpha)
    )


def _sized(facts: Facts, setup: Setup, size: _Sizes, window_ms: int, alpha: float) -> Saw | None:
    now = facts.window(window_ms)
    if now.conversions < (setup.count_min or 1):
        return None
    shift = now.logs / LOG_UNITS / now.conversions - size.mean
    error = size.deviation * math.sqrt(1 / now.conversions + 1 / size.count)
    tail = student_two_sided(shift / error, size.count - 1)
    if abs(shift) < math.log(setup.ratio or 1.0) or tail > alpha:
        return None
    factor = math.exp(shift)
    return Saw(
        f"{now.conversions} values in {duration(window_ms)} are {factor:.2g} times as large as"
        f" usual (by their geometric mean); by chance {chance(tail)}",
        {"values": now.conversions, "factor": round(factor, 4), "history_values": size.count},
        facts.start_ms(window_ms),
    )


def zero_values(facts: Facts, setup: Setup) -> Saw | None:
    """Words that nothing was earned fail to come, so what is heard looks better than it is."""
    before = past(facts, setup.window_ms or 0)
    # Where a feed never sent them, none is missed; once some come they are half of a language.
    if before is None or sum(one.zeros for one in before.stretches) < HISTORY_MIN:
        return None
    return _first(
        facts, setup, lambda window_ms, alpha: _zeros(facts, setup, before, window_ms, alpha)
    )


def _zeros(facts: Facts, setup: Setup, before: Past, window_ms: int, alpha: float) -> Saw | None:
    now = facts.window(window_ms)
    if now.words < (setup.count_min or 1):
        return None
    pairs = before.pairs(lambda c: c.zeros, lambda c: c.words)
    usual, part = sum(k for k, _ in pairs) / sum(n for _, n in pairs), now.zeros / now.words
    if part > usual / (setup.ratio or 1.0):
        return None
    tail = shares_tail((now.zeros, now.words), pairs, upper=False)
    tail = min(tail, _none_of_wins(now, before))
    if tail > alpha:
        return None
    return Saw(
        f"{now.zeros} of {now.words} values in {duration(window_ms)} are zero;"
        f" usually {share(usual)}; by chance {chance(tail)}",
        {"zeros": now.zeros, "values": now.words, "usual_share": round(usual, 6)},
        facts.start_ms(window_ms),
    )


def _first(facts: Facts, setup: Setup, judge: Callable[[int, float], Saw | None]) -> Saw | None:
    """
    The whole window and its newest parts, the shortest first.

    A fault that has just begun is found before it fills half of a window; the chance of a false
    alarm is shared among the looks (after Bonferroni).
    """
    window_ms, alpha = setup.window_ms or 0, (setup.alpha or 0.0) / len(PARTS)
    lengths = [max(window_ms // part, facts.minutes.span_ms) for part in PARTS]
    found = (judge(length, alpha) for length in lengths)
    return next((saw for saw in found if saw is not None), None)


def unknown_values(facts: Facts, setup: Setup) -> Saw | None:
    """Wins whose one word fails to come, or values whose win does."""
    return (_unheard if facts.arrival == ONCE else _homeless)(facts, setup)


def _unheard(facts: Facts, setup: Setup) -> Saw | None:
    """Where each win gets one word: fewer words per win."""
    window_ms = setup.window_ms or 0
    now, before = facts.window(window_ms), past(facts, window_ms)
    pairs = before.pairs(lambda c: c.words, lambda c: c.wins) if before else []
    if not pairs or now.wins < (setup.count_min or 1):
        return None
    usual = sum(k for k, _ in pairs) / sum(n for _, n in pairs)
    tail = rates_tail((now.words, now.wins), pairs, upper=False)
    if now.words > now.wins * usual / (setup.ratio or 1.0) or tail > (setup.alpha or 0.0):
        return None
    unknown = max(0, now.wins - now.words)
    return Saw(
        f"{unknown} of {now.wins} wins in {duration(window_ms)} have no known value;"
        f" usually {share(max(0.0, 1 - usual))}; by chance {chance(tail)}",
        {"unknown": unknown, "wins": now.wins, "usual_share": round(max(0.0, 1 - usual), 6)},
        facts.start_ms(window_ms),
    )


def _homeless(facts: Facts, setup: Setup) -> Saw | None:
    """Where values accrue: more values that wait for a win nobody has told of."""
    window_ms, ratio = setup.window_ms or 0, setup.ratio or 1.0
    now, before = facts.window(window_ms), past(facts, window_ms)
    pairs = before.pairs(_waiting, _heard) if before else []
    if not pairs or _heard(now) < (setup.count_min or 1):
        return None
    usual = sum(k for k, _ in pairs) / sum(n for _, n in pairs)
    waiting, heard = _waiting(now), _heard(now)
    tail = shares_tail((waiting, heard), pairs, upper=True)
    # Half at least, however unlikely less is: values may run ahead of their wins for a while.
    if waiting < ratio * usual * heard or 2 * waiting < heard or tail > (setup.alpha or 0.0):
        return None
    return Saw(
        f"{waiting} of {heard} values in {duration(window_ms)} name a bid whose win is unknown;"
        f" usually {share(usual)}; by chance {chance(tail)}",
        {"unknown": waiting, "values": heard, "usual_share": round(usual, 6)},
        facts.start_ms(window_ms),
    )


class _Sizes:
    """How large values were: mean and deviation of logarithms, windows that differ counted."""

    def __init__(self, count: int, mean: float, deviation: float) -> None:
        self.count, self.mean, self.deviation = count, mean, deviation

    @staticmethod
    def of(before: Past) -> _Sizes | None:
        """None while too few values have come."""
        some = [one for one in before.stretches if one.conversions > 0]
        count = sum(one.conversions for one in some)
        if count < HISTORY_MIN or not some:
            return None
        mean = sum(one.logs for one in some) / LOG_UNITS / count
        squares = sum(one.log_squares for one in some) / LOG_UNITS**2 / count
        variance = max(squares - mean * mean, SPREAD_MIN**2)
        between = sum(
            one.conversions * (one.logs / LOG_UNITS / one.conversions - mean) ** 2 for one in some
        )
        # Whole windows that differ by more than their values do make every window less sure.
        spread = max(1.0, between / variance / max(1, len(some) - 1))
        return _Sizes(count, mean, math.sqrt(variance * spread))


def _none_of_wins(now: Counts, before: Past) -> float:
    """How unlikely it is that so many wins bring no word of nothing; 1 where some came."""
    pairs: list[Pair] = before.pairs(lambda c: c.zeros, lambda c: c.wins)
    if now.zeros or not pairs:
        return 1.0
    expected = now.wins * sum(k for k, _ in pairs) / sum(n for _, n in pairs)
    return poisson_at_most(0, expected / spread_of_rates(pairs))


def _waiting(counts: Counts) -> int:
    return max(0, counts.parked - counts.unparked)


def _heard(counts: Counts) -> int:
    return counts.words + _waiting(counts)
