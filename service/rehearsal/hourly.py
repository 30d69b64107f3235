"""A day of paced bidding by the clock, hour by hour, against the profile it should follow.

Apart from `paced`, which counts rounds: here entries carry times, come in ticks and late, and
traffic may change while nobody says so. Values are known and alike, the exchange second-price.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.random import Generator

from service.learner import pacing, profile
from service.learner.pacing import Pace
from service.learner.profile import Plan, Progress
from service.rehearsal.market import Draws

HOUR_MS = 3_600_000
TICK_MS = 10_000
TICKS = HOUR_MS // TICK_MS


@dataclass(frozen=True, slots=True)
class Hour:
    """
    What one hour came to; money in nanos.

    Args:
        planned: By the profile, of the day's money.
        due: By the plan made anew at the start of the hour.
        spent: Paid for what was won in it.
        wins: Won in it.
    """

    planned: int
    due: int
    spent: int
    wins: int

    @property
    def off(self) -> float:
        """How far spend is from the profile, as a share of it."""
        return abs(self.spent / self.planned - 1.0)


@dataclass(frozen=True, slots=True)
class Market:
    """
    What a line item meets.

    Args:
        value: What each impression is worth, in nanos.
        competing: Competing bids.
        traffic: Opportunities expected in each hour of the run; they come by chance.
        floor_from: Hour from which the floor stands.
        floor: Least bid taken from then on, in nanos.
    """

    value: int
    competing: Draws
    traffic: Sequence[float]
    floor_from: int = 0
    floor: int = 0


def play_hours(
    market: Market,
    plan: Plan,
    starts_ms: int,
    rules: pacing.Rules,
    pace: Pace,
    late_ticks: int,
    rng: Generator,
    steady: bool = True,
) -> list[Hour]:
    """
    Bid hour after hour; each tick teaches what was paid so many ticks before.

    Args:
        market: What is on sale.
        plan: Daily and total money and their profile.
        starts_ms: When the first hour begins.
        rules: How the multiplier moves.
        pace: The multiplier at first.
        late_ticks: How late prices become known.
        rng: The only source of chance.
        steady: Whether pacing is told what is due while prices are on their way.
    """
    late_ms = late_ticks * TICK_MS if steady else 0
    progress, hours = Progress(starts_ms), list[Hour]()
    on_their_way = deque([(0, 0)] * late_ticks)
    for number, expected in enumerate(market.traffic):
        starts = starts_ms + number * HOUR_MS
        due, spent, wins = profile.due_between(progress, starts, starts + HOUR_MS, plan), 0, 0
        counts = rng.poisson(expected / TICKS, TICKS)
        floor = market.floor if number >= market.floor_from else 0
        for tick, count in enumerate(counts.tolist()):
            bid = float(pacing.paced(market.value, pace.multiplier(rules)))
            # Prices still on their way are paid all the same, though no lesson has told them yet.
            left = profile.left_today(progress, progress.clock_ms, plan) - sum(
                money for _, money in on_their_way
            )
            # A floor competes like a bid: nothing is sold below it.
            prices = np.maximum(market.competing.draw(rng, count), floor)
            prices = prices[prices <= bid]
            paid = prices[np.cumsum(prices) <= left]
            spent, wins = spent + int(paid.sum()), wins + paid.size
            on_their_way.append((paid.size, int(paid.sum())))
            seen = pacing.Seen(count, *on_their_way.popleft())
            at_ms = starts + (tick + 1) * TICK_MS
            progress, due_now = profile.advance(progress, at_ms, seen.spent, plan)
            late = profile.due_between(progress, at_ms, at_ms + late_ms, plan)
            pace = pacing.learn(pace, seen, due_now, rules, late)
        hours.append(Hour(_planned(starts, plan), due, spent, wins))
    return hours


def _planned(starts_ms: int, plan: Plan) -> int:
    day = profile.day_of(starts_ms, plan.zone)
    hour = profile.weight_between(starts_ms, starts_ms + HOUR_MS, plan)
    return (plan.daily or 0) * hour // profile.weight_between(*day, plan)
