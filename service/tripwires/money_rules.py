"""Rules on money: prices and spend far off their own history, and cost that should not be."""

from __future__ import annotations

from collections.abc import Sequence
from statistics import median

from service.tripwires.history import Facts, past
from service.tripwires.saying import Saw, amount, duration
from service.tripwires.setups import Setup

# A normal law's standard deviation over its median absolute deviation (Hampel, JASA 69, 1974).
PER_DEVIATION = 1.4826
DEVIATIONS = 6.0
SPREAD_MIN = 0.05  # However steady the past, a twentieth is no news.
CPM = 1000


def clearing_price(facts: Facts, setup: Setup) -> Saw | None:
    """A win costs far more or less than it used to."""
    window_ms, least = setup.window_ms or 0, setup.count_min or 1
    now, before = facts.window(window_ms), past(facts, window_ms)
    if before is None or now.wins < least:
        return None
    # A mean of each stretch, so that one busy hour weighs no more than a quiet one.
    usual = [one.paid / one.wins for one in before.stretches if one.wins > 0]
    price = now.paid / now.wins
    if not far_off(price, usual, setup.ratio or 1.0):
        return None
    mean, cpm = amount(CPM * price, facts.currency), amount(CPM * median(usual), facts.currency)
    return Saw(
        f"a thousand of the {now.wins} impressions won in {duration(window_ms)} cost {mean};"
        f" usually {cpm}",
        {
            "wins": now.wins,
            "mean_price_cpm_nanos": round(price),
            "usual_price_cpm_nanos": round(median(usual)),
        },
        facts.start_ms(window_ms),
    )


def spend_speed(facts: Facts, setup: Setup) -> Saw | None:
    """Money goes out far faster or slower than it used to, while bids go out."""
    window_ms, least = setup.window_ms or 0, setup.count_min or 1
    now, before = facts.window(window_ms), past(facts, window_ms)
    if before is None or now.bids < least:
        return None
    usual = [one.spent * window_ms / before.span_ms for one in before.stretches]
    if not far_off(now.spent, usual, setup.ratio or 1.0):
        return None
    spent, mean = amount(now.spent, facts.currency), amount(median(usual), facts.currency)
    return Saw(
        f"{spent} spent in {duration(window_ms)}; usually {mean}",
        {"spent_nanos": now.spent, "usual_nanos": round(median(usual))},
        facts.start_ms(window_ms),
    )


def unfunded(facts: Facts, setup: Setup) -> Saw | None:
    """Cost was booked that found no free money."""
    if facts.unfunded <= 0:
        return None
    said = f"{amount(facts.unfunded, facts.currency)} of cost found no free money"
    return Saw(said, {"unfunded_nanos": facts.unfunded}, _since_ms(facts, "unfunded"))


def disputed(facts: Facts, setup: Setup) -> Saw | None:
    """Prices were asked above what was bid."""
    if facts.disputed <= 0:
        return None
    said = f"{amount(facts.disputed, facts.currency)} was asked above what was bid"
    return Saw(said, {"disputed_nanos": facts.disputed}, _since_ms(facts, "disputed"))


def learner_halted(facts: Facts, setup: Setup) -> Saw | None:
    """The learner has been halted for longer than a refold takes."""
    since_ms = _since_ms(facts, "halted")
    if not facts.halted or facts.now_ms - since_ms < (setup.window_ms or 0):
        return None
    seconds = (facts.now_ms - since_ms) // 1000
    said = f"the learner has been halted for {seconds} seconds, and every bid passes"
    return Saw(said, {"halted_s": seconds}, since_ms)


def far_off(seen: float, usual: Sequence[float], ratio: float) -> bool:
    """Whether a number is off by the ratio and by many robust deviations of its history."""
    if not usual or (middle := median(usual)) <= 0:
        return False
    deviation = PER_DEVIATION * median(abs(one - middle) for one in usual)
    by_ratio = seen >= ratio * middle or seen <= middle / ratio
    # Below, a number can be at most its median away, so nearness to nothing counts as far.
    near_nothing = seen <= middle / ratio and middle >= 2 * deviation
    return by_ratio and (
        abs(seen - middle) > DEVIATIONS * max(deviation, SPREAD_MIN * middle) or near_nothing
    )


def _since_ms(facts: Facts, name: str) -> int:
    """When it last grew, as far as buckets tell."""
    # The finest that still shows it: minutes are forgotten first.
    for series in (facts.minutes, facts.hours, facts.days):
        grown = [
            start
            for start, counts in zip(series.starts, series.buckets, strict=True)
            if start <= facts.now_ms and getattr(counts, name) > 0
        ]
        if grown:
            return grown[-1]
    return facts.now_ms
