"""Hourly spend follows the profile, through changes of traffic, lateness and a rising floor."""

from __future__ import annotations

import numpy as np
import pytest

from service.learner import pacing
from service.learner.pacing import Pace
from service.learner.profile import Plan
from service.rehearsal import hourly, pacing_figures
from service.rehearsal.hourly import Hour, Market
from service.rehearsal.market import UniformBids
from service.rehearsal.pacing_figures import DAY_MS, RIVALS, RULES, SHAPE, ZONE
from service.rehearsal.regret import SCALE


@pytest.mark.parametrize("like_profile", [True, False])
@pytest.mark.parametrize("rivals", sorted(RIVALS))
def test_hourly_spend_is_within_a_tenth_of_the_profile(rivals: str, like_profile: bool) -> None:
    """In 95 % of hours with 500 wins, from the second hour after traffic doubles or halves."""
    days = [
        pacing_figures.hours(RIVALS[rivals], factor, like_profile, seed=0) for factor in (2.0, 0.5)
    ]
    share, count = pacing_figures.within_share(days)

    assert count >= 30
    assert share >= 0.95
    for day in days:
        planned = sum(hour.planned for hour in day)
        assert 0.99 <= sum(hour.spent for hour in day) / planned <= 1.0


def test_the_hour_of_a_change_is_off() -> None:
    """What is left out of the figure above is not near the profile: the change is real."""
    day = pacing_figures.hours(RIVALS["uniform"], 2.0, True, seed=0)
    still = pacing_figures.hours(RIVALS["uniform"], 1.0, True, seed=0)
    change = pacing_figures.CHANGES[0]
    assert day[change].off > 3 * np.median(pacing_figures.judged(still))


def test_a_busy_line_item_must_be_told_of_money_on_its_way() -> None:
    """With 30 times the traffic, late prices make pacing swing unless it is told."""
    shares = [
        pacing_figures.within_share(
            [pacing_figures.hours(RIVALS["uniform"], 1.0, True, 1, busy=30, steady=steady)]
        )[0]
        for steady in (False, True)
    ]
    assert shares[0] < 0.5
    assert shares[1] >= 0.95


def test_pacing_recovers_when_the_floor_rises_in_mid_flight() -> None:
    """A floor of 0.6 over bids of 0.55 from noon on: from the second hour spend is as planned."""
    day = _with_floor(0.6)
    after = [hour.off for hour in day[14:23]]
    assert max(after) < 0.15
    assert np.median(after) < 0.05
    assert sum(hour.spent for hour in day) >= 0.99 * sum(hour.planned for hour in day)


def _with_floor(floor: float) -> list[Hour]:
    traffic = np.asarray(SHAPE) * 1000.0
    plan = Plan(ZONE, SHAPE, daily=int(0.3 * 0.5 * SCALE * traffic.sum()))
    first = pacing.first_by_forecast(1.0, 0.3)
    market = Market(SCALE, UniformBids(0, SCALE), traffic.tolist(), 12, int(floor * SCALE))
    start = Pace.fresh(RULES, first, pacing.usual_price(SCALE, first))
    return hourly.play_hours(market, plan, DAY_MS, RULES, start, 3, np.random.default_rng(8))
