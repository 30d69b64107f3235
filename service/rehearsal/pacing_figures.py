"""The measured figures of pacing, return target and hints, one function each.

Apart from the players, so that the tests and the command that prints them measure the same.
All markets are invented and drawn from a seed.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import chain

import numpy as np
from numpy.random import default_rng

from service.learner import pacing, return_target
from service.learner.hints import Prior
from service.learner.pacing import Pace
from service.learner.profile import Plan
from service.rehearsal import hinted, hourly, paced, programme
from service.rehearsal.hourly import Hour
from service.rehearsal.market import Draws, LognormalBids, Nanos, UniformBids
from service.rehearsal.regret import SCALE, uniform_terms

RULES = pacing.Rules("shifted", pacing.STEP, 1)
VALUE = SCALE // 2  # The one value of the bidders who learn it, and of the hours.
PART = 50  # Where one value is paced, this part of the top price is to be spent each round.
ZONE = "Europe/Zurich"
SHAPE = (2, 1, 1, 1, 1, 2, 4, 6, *(8,) * 9, 9, 10, 10, 9, 7, 5, 3)
DAY_MS = 1_780_264_800_000  # A midnight in June.
CHANGES = (9, 15)  # Traffic doubles or halves at the first hour and comes back at the second.
LATE_TICKS = 3
WINS_LEAST = 500
TARGET = 1_000_000
ORACLE = 0.18  # Value per round of the best fixed bid, 2 v / tau, for v = 0.3 at target 1.


@dataclass(frozen=True, slots=True)
class Budget:
    """Shares of what the hindsight programme earns, and of the budget."""

    earned: float
    spent: float


@dataclass(frozen=True, slots=True)
class Target:
    """
    A return target beside the static oracle, all as shares of what the oracle pays.

    Args:
        valued: Value won, as a share of the oracle's.
        least: The lowest value / target - paid on the way; below 0 is a violation.
        end: The same at the end.
    """

    valued: float
    least: float
    end: float


@dataclass(frozen=True, slots=True)
class Hinted:
    """Surplus of bidding hints over that of one learnt value, and the spend of both."""

    times: float
    spent_hints: float
    spent_one: float
    ratio: float


def known_values(rounds: int, seed: int, guess: float = 1.0) -> Budget:
    """
    Values and prices uniform, a budget of a tenth of the top price each round.

    Args:
        rounds: Opportunities.
        seed: Of the market.
        guess: How wrong the forecast of unpaced spend is that gives the first multiplier.
    """
    values, competing = paced.uniform(default_rng(seed), rounds, SCALE)
    budget = rounds * SCALE // 10
    # Uniform values and prices, unpaced, spend a sixth of the top price each round.
    first = pacing.first_by_forecast(guess * SCALE / 6.0, SCALE / 10.0)
    start = Pace.fresh(RULES, first, pacing.usual_price(SCALE, first))
    run = paced.play(values, competing, budget, RULES, start, paced.known(values))
    gains = (values - competing) / SCALE
    best = programme.by_solver(gains, competing / SCALE, budget / SCALE)
    return Budget(float(gains[run.won].sum()) / best.earned, run.spent / budget)


def one_value(rounds: int, seed: int, method: str | None) -> Budget:
    """
    One value of half the top price for all, prices uniform, a fiftieth of the top each round.

    Values are chance, all or nothing. What is earned counts the mean value, as the programme
    does, since no bidder can choose by values that nobody knows before.

    Args:
        rounds: Opportunities.
        seed: Of the market.
        method: Value method that learns it from wins; None where it is known.
    """
    rng = default_rng(seed)
    competing = rng.integers(0, SCALE, rounds, dtype=np.int64)
    values = np.where(rng.random(rounds) < VALUE / SCALE, np.int64(SCALE), np.int64(0))
    budget = rounds * SCALE // PART
    prices = np.linspace(0.0, SCALE, 1001)
    # Nobody knows the value, so the first multiplier is for its ceiling.
    first = pacing.first_by_curve(SCALE, prices, np.full(1001, 1 / 1001), SCALE / PART)
    start = Pace.fresh(RULES, first, pacing.usual_price(SCALE, first))
    alike = np.full(rounds, VALUE, np.int64)
    guess = paced.known(alike) if method is None else paced.learnt(uniform_terms(method))
    run = paced.play(values, competing, budget, RULES, start, guess)
    gains = VALUE - competing
    best = programme.by_greed(gains, competing, budget)
    return Budget(float(gains[run.won].sum()) / best.earned, run.spent / budget)


def return_on_spend(rounds: int, seed: int, strict: bool, budget: float | None = None) -> Target:
    """
    One value of 0.3 top prices, prices uniform, target 1, step 1 / sqrt(rounds).

    Args:
        rounds: Opportunities.
        seed: Of the market.
        strict: Whether the target may never be missed on the way.
        budget: Money as a share of what the oracle without budget pays; None for no limit.
    """
    competing = default_rng(seed).integers(0, SCALE, rounds, dtype=np.int64)
    values = np.full(rounds, 3 * SCALE // 10, np.int64)
    rules = return_target.Rules(TARGET, pacing.units(rounds**-0.5), SCALE)
    whole = ORACLE * rounds * SCALE
    money = None if budget is None else int(budget * whole)
    run = paced.play_return(values, competing, rules, strict, money, RULES if budget else None)
    # With a budget the best fixed bid is the one that spends it: value grows with its root.
    oracle = whole * (1.0 if budget is None else budget**0.5)
    return Target(run.valued / oracle, run.slack_least / whole, run.slack / whole)


def hours(
    rivals: Draws,
    factor: float,
    like_profile: bool,
    seed: int,
    busy: int = 1,
    steady: bool = True,
) -> list[Hour]:
    """
    One day whose traffic changes by a factor for six hours, prices known half a minute late.

    Args:
        rivals: Competing bids.
        factor: Of traffic, in the hours between the changes.
        like_profile: Whether traffic else follows the profile; if not it is even.
        seed: Of the market.
        busy: Times the usual traffic, and the money with it.
        steady: Whether pacing is told what is due while prices are on their way.
    """
    usual = np.asarray(SHAPE, np.float64) * 1000.0 if like_profile else np.full(24, 6000.0)
    traffic = busy * usual
    daily = int(0.3 * _unpaced(rivals) * traffic.sum())
    traffic[CHANGES[0] : CHANGES[1]] *= factor
    first = pacing.first_by_forecast(1.0, 0.3)
    start = Pace.fresh(RULES, first, pacing.usual_price(SCALE, first))
    market = hourly.Market(SCALE, rivals, traffic.tolist())
    plan = Plan(ZONE, SHAPE, daily=daily)
    rng = default_rng(seed)
    return hourly.play_hours(market, plan, DAY_MS, RULES, start, LATE_TICKS, rng, steady)


def judged(day: list[Hour]) -> list[float]:
    """How far hours with enough wins are off, but for the first and those of a change."""
    kept = (hour for at, hour in enumerate(day) if at not in (0, *CHANGES))
    return [hour.off for hour in kept if hour.wins >= WINS_LEAST]


def within_share(days: list[list[Hour]], off: float = 0.1) -> tuple[float, int]:
    """The share of judged hours that are at most so far off, and their number."""
    offs = list(chain.from_iterable(judged(day) for day in days))
    return float(np.mean(np.asarray(offs) <= off)), len(offs)


def by_hints(rivals: Draws, share: float, seed: int, opportunities: int = 40_000) -> Hinted:
    """
    Lognormal mean values of spread 1, hints three times too high, one event in a hundred wins.

    Args:
        rivals: Competing bids, for a mean value of a million nanos.
        share: Budget as a share of all opportunities at the mean value.
        seed: Of the market.
        opportunities: Their number.
    """
    mean = 10**6
    offers = hinted.lognormal(default_rng(seed), opportunities, mean, 1.0, 3.0, 100 * mean, rivals)
    budget = int(share * mean * opportunities)
    prior = Prior(100 * mean, ratio=1.0 / 3.0)
    several = hinted.by_hints(offers, budget, RULES, prior)
    one = hinted.by_one_value(offers, budget, RULES, prior)
    return Hinted(
        several.surplus / one.surplus, several.spent / budget, one.spent / budget, several.ratio
    )


RIVALS: dict[str, Draws] = {
    "uniform": UniformBids(0, SCALE),
    "lognormal": LognormalBids(SCALE // 4, 0.5),
}


def _unpaced(rivals: Draws) -> float:
    # Of one seed, so that the budget does not change with the market's.
    drawn: Nanos = rivals.draw(default_rng(0), 10_000)
    return float(np.where(drawn <= SCALE, drawn, 0).mean())
