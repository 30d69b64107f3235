"""A local day from the fold to the price: a budget that binds is spent by its end and not at noon.

Apart from the tests of the parts: here the stream teaches the real memory and the real snapshot
bids on it, a minute at a time, with money stopped where the day's budget ends.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np

from service.decision.learnability import defaults
from service.decision.price import Proposal, ready
from service.decision.terms import Terms
from service.learner.fold import fold
from service.learner.lesson import Lesson
from service.learner.memory import Memory
from service.learner.profile import day_of
from service.learner.rules import Rules
from tests.decision.invented import CAP, partial

ZONE = "Europe/Zurich"
SOME_NOON_MS = 1_780_000_000_000
MINUTE_MS = 60_000
PER_MINUTE = 12
WORTH, CHANCE = 50_000_000, 0.1  # 0.005 of an impression on average: five eighths of the cap.
DAILY = 6 * 10**9  # About a tenth of what bidding the value would spend.


@dataclass(frozen=True)
class Day:
    """Spend by the end of each minute, in nanos, and what set the prices."""

    spent: list[int]
    set_by: set[str]

    @property
    def ended(self) -> int:
        """The first minute by which 99 % of the budget was gone; 1440 when it never was."""
        gone = (at for at, spent in enumerate(self.spent) if spent >= 0.99 * DAILY)
        return next(gone, 24 * 60)


@cache
def played(pacing: str) -> Day:
    """A day of opportunities without end, bid for on what was learnt a minute before."""
    config = _config(pacing)
    rules, terms, rng = Rules.from_config(config), Terms.from_config(config), _rng()
    starts_ms, _ = day_of(SOME_NOON_MS, ZONE)
    memory = fold(Memory.fresh(), [_create(config, starts_ms)], rules)
    spent, spends, set_by = 0, list[int](), set[str]()
    for minute in range(24 * 60):
        answer = ready(memory, terms).answer
        assert isinstance(answer, Proposal)
        set_by.add(answer.set_by)
        at_ms, lessons = starts_ms + (minute + 1) * MINUTE_MS, list[Lesson]()
        for rival in rng.integers(0, CAP, PER_MINUTE).tolist():
            bid = min(answer.price, DAILY - spent)
            if bid == 0:
                continue
            if rival > bid:
                lessons.append(Lesson("lost", {"round": 1}, at_ms, at_ms))
                continue
            spent += rival
            lessons += _win(rival, at_ms, WORTH if rng.random() < CHANCE else 0)
        memory = fold(memory, lessons, rules)
        spends.append(spent)
    return Day(spends, set_by)


def _config(pacing: str) -> dict[str, Any]:
    base = partial("kl-ucbid")
    flight = {"starts_ms": 0, "ends_ms": None, "time_zone": ZONE}
    said = {"pacing": {"method": pacing}, "daily_budget": DAILY, "flight": flight}
    return defaults({**base, **said, "grace_ms": 900_000})[0]


def _create(config: dict[str, Any], at_ms: int) -> Lesson:
    body = {
        **{"budget": config["budget"], "daily_budget": DAILY, "ends_ms": None, "zone": ZONE},
        **{"pacing": config["pacing"], "grace_ms": config["grace_ms"]},
        "guess": config["value"]["expected"]["per_impression"],
    }
    return Lesson("create", body, at_ms, at_ms)


def _win(price: int, at_ms: int, worth: int) -> list[Lesson]:
    win = Lesson("won", {"price": price, "round": 1}, at_ms, at_ms, price)
    value = {"amount": worth, "was": None, "won_ms": at_ms}
    return [win, Lesson("value", value, at_ms, at_ms)]


def _rng() -> np.random.Generator:
    return np.random.default_rng(5)


def test_paced_the_budget_lasts_the_day_and_is_spent() -> None:
    """At least 97 % of it, close to half by noon, and at most 99 % before the last hour."""
    day = played("dual")
    assert day.spent[-1] >= 0.97 * DAILY
    assert 0.45 * DAILY <= day.spent[12 * 60 - 1] <= 0.55 * DAILY
    assert day.ended >= 23 * 60
    assert "pacing" in day.set_by


def test_without_pacing_it_ends_before_noon() -> None:
    """The same market, budget and method: money in hand stops it, and the afternoon is lost."""
    day = played("none")
    assert day.spent[-1] >= 0.99 * DAILY
    assert day.ended < 12 * 60
    assert "pacing" not in day.set_by
