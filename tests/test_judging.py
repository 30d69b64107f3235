"""Who needs somebody, and what is at stake: tables of standings and what follows from them."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from service.judging import HOUR_MS, Judged, alarm, found, judge, planned_at
from service.store.watching import Overview, Standing
from tests.builders import UNIT, line_item

NOON_MS = 1_764_586_800_000  # 2025-12-01T11:00:00Z, noon in Zurich.
FREEZE = {"source": "tripwire", "at_ms": 1, "actor": "tripwire", "reason": "values ran away"}
BALANCE = {"budget": 100 * UNIT, "target": 100 * UNIT, "spent": 30 * UNIT, "held": UNIT}
BALANCE |= {"unfunded": 0, "disputed": 0, "seq": 9, "at_ms": NOON_MS}


def standing(name: str = "garden", spent_today: int = 12 * UNIT, **changes: Any) -> Standing:
    """A line item that has spent one unit an hour since midnight, of a plan of two."""
    day = {"target": 48 * UNIT, "spent": spent_today, "held": 0, "over_spent": 0}
    config = line_item(id=name, daily_budget=48 * UNIT, **changes.pop("config", {}))
    balance = BALANCE | changes.pop("balance", {})
    made = Standing(name, config, 0, balance, False, False, day, open_holds=UNIT // 2)
    return replace(made, holds_end_ms=NOON_MS + 900_000, **changes)


def judged(*standings: Standing, all_freezes: list[dict[str, Any]] | None = None) -> list[Judged]:
    """These standings judged at noon."""
    return judge(Overview(NOON_MS, list(standings), all_freezes or []))


def test_money_at_risk_is_what_goes_out_at_todays_speed() -> None:
    """Twelve units in twelve hours are one an hour, and the plan says how it should be."""
    (one,) = judged(standing())
    assert (one.status, one.needs, one.why) == ("bids", False, ())
    assert (one.speed, one.at_risk) == (UNIT, UNIT)
    assert (one.spent_today, one.planned, one.ends_ms) == (12 * UNIT, 24 * UNIT, None)


def test_the_days_money_ends_before_the_day_where_it_goes_too_fast() -> None:
    """Thirty-six of forty-eight are gone by noon; at three an hour the rest lasts four hours."""
    (one,) = judged(standing(spent_today=36 * UNIT))
    assert one.ends_ms == NOON_MS + 4 * HOUR_MS


def test_no_more_is_at_risk_than_is_left() -> None:
    """Speed beyond the last money is no risk of ours."""
    (one,) = judged(standing(spent_today=47 * UNIT + UNIT // 2))
    assert one.at_risk == UNIT  # Half a unit left and half a unit held.


def test_stopped_only_open_bids_are_at_risk() -> None:
    """A frozen line item can still pay for the bids that are out."""
    (one,) = judged(standing(freezes=(FREEZE,)))
    assert (one.status, one.at_risk, one.ends_ms) == ("frozen", UNIT // 2, None)


@pytest.mark.parametrize(
    ("changes", "status", "needs"),
    [
        ({"freezes": (FREEZE,)}, "frozen", True),
        ({"freezes": (FREEZE | {"source": "audit"},)}, "frozen", True),
        ({"freezes": (FREEZE | {"source": "person"},)}, "frozen", False),
        ({"freezes": (FREEZE | {"source": "restore"},)}, "waits", True),
        ({"freezes": (FREEZE | {"source": "closed"},)}, "closed", False),
        ({"freezes": (FREEZE, FREEZE | {"source": "closed"})}, "closed", False),
        ({"halted": True}, "halted", True),
        ({"stuck": True}, "bids", True),
        ({"findings": ("value rate: 80 where 16 are usual",)}, "bids", True),
        ({"waiting": 3}, "bids", True),
        ({"balance": {"unfunded": 1}}, "bids", True),
        ({"balance": {"disputed": 1}}, "bids", True),
        ({"balance": {"spent": 99 * UNIT}}, "spent", False),
        ({"config": {"flight": {"starts_ms": NOON_MS + 1}}}, "resting", False),
        ({"config": {"flight": {"ends_ms": NOON_MS}}}, "resting", False),
    ],
)
def test_what_needs_somebody(changes: dict[str, Any], status: str, needs: bool) -> None:
    """A tripwire, an audit, a halt or missing money call; what a person decided does not."""
    (one,) = judged(standing(**changes))
    assert (one.status, one.needs) == (status, needs)
    assert bool(one.why) is (needs or status != "bids")


def test_the_switch_over_all_freezes_everyone_and_calls_nobody() -> None:
    """Somebody has thrown it, and the row says who and why."""
    switch = FREEZE | {"source": "all", "actor": "anna", "reason": "drill"}
    (one,) = judged(standing(), all_freezes=[switch])
    assert (one.status, one.needs) == ("frozen", False)
    assert one.why == ("everything is frozen by anna: drill",)


def test_those_who_need_somebody_come_first_each_part_by_risk() -> None:
    """The dearest of those that call stands on top, the cheapest calm one at the end."""
    rows = judged(
        standing("calm-slow", spent_today=UNIT),
        standing("calm-fast", spent_today=36 * UNIT),
        standing("calls-little", freezes=(FREEZE,)),
        standing("calls-much", waiting=1, spent_today=24 * UNIT),
    )
    assert [one.id for one in rows] == ["calls-much", "calls-little", "calm-fast", "calm-slow"]


def test_amounts_of_different_currencies_are_never_added() -> None:
    """The alarm counts everybody and keeps each currency's stake apart."""
    person = FREEZE | {"source": "person"}
    told = alarm(
        judged(
            standing("a", waiting=1),
            standing("b", waiting=1, config={"currency": "CHF"}),
            standing("c", waiting=1),
            standing("d", freezes=(person,)),
            standing("e"),
        )
    )
    assert (told.total, told.needing, told.stopped_by_people) == (5, 3, 1)
    assert told.stakes == {"CHF": UNIT, "EUR": 2 * UNIT}


@pytest.mark.parametrize(
    ("wanted", "ids"),
    [("ALPINE", ["alpine"]), ("invented", ["alpine", "b"]), ("b frozen", ["b"]), ("zebra", [])],
)
def test_words_are_looked_for_in_id_name_and_state(wanted: str, ids: list[str]) -> None:
    """Every word must be there, whatever its case."""
    rows = judged(standing("alpine"), standing("b", freezes=(FREEZE,)))
    assert sorted(one.id for one in found(rows, wanted)) == ids


def test_the_plan_follows_the_profile_of_the_day() -> None:
    """With all weight on the afternoon nothing is due by noon, and all of it by midnight."""
    afternoon = [0] * 12 + [1] * 12
    config = line_item(daily_budget=48 * UNIT, pacing={"method": "dual", "profile": afternoon})
    assert planned_at(config, 0, NOON_MS) == 0
    assert planned_at(config, 0, NOON_MS + 6 * HOUR_MS) == 24 * UNIT


def test_the_plan_begins_with_the_line_item() -> None:
    """One that was created at eleven was to spend nothing before; by noon a thirteenth is due."""
    config = line_item(daily_budget=48 * UNIT)
    assert planned_at(config, NOON_MS - HOUR_MS, NOON_MS) == 48 * UNIT // 13
    assert planned_at(config, NOON_MS + 1, NOON_MS) == 0
