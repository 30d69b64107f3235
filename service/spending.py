"""What people see of how money is spread and what it returns; pure, a part of the state."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from service.decision.brakes import BY_PACING, BY_RETURN
from service.learner import profile, return_part
from service.learner.memory import Memory, UnreadableMemory
from service.learner.pace_part import NONE, Pacing
from service.learner.pacing import UNITS
from service.learner.parts import PACE, RETURN
from service.learner.profile import Progress
from service.learner.rules import return_rules
from service.store.reading import Facts

GUARANTEE = (
    "none jointly: pacing and return targets are each proved for values known before the bid and "
    "prices told at once; no theorem covers values that are learnt, pacing and delay together"
)
NO_METHOD = "bids are not paced: money is spent as it is won, up to the budget and the day's"
NO_RATE = "nothing to hold to: there is neither a daily budget nor a budget whose flight ends"
NOT_YET = "no lesson yet: bids are at the value until the first prices are known"
FREE = "spend is at or below the plan: bids are at the value"
HELD = "spend would pass the plan: bids are lowered by one factor for all"
LASTS = "at today's pace the day's money lasts until its end"
ENDS = "at today's pace the day's money ends before the day"
UNSPENT = "nothing was spent today, so there is no pace to go by"
ON_AVERAGE = (
    "held on average over many rounds: it may be missed on the way by about the root of their "
    "number, and while values are on their way it looks lower than it is"
)
STRICT = (
    "strict: every bid keeps the target as values are believed now, and for that gives up what "
    "it might earn; published results differ on whether any method can do both (Feng, "
    "Padmanabhan, Wang, 2023, for one model; Vaze, Sinha, 2025, against it in another)"
)


def show_spending(facts: Facts, memory: Memory) -> dict[str, Any]:
    """The pacing block of a state; money in nanos under names that end in `_nanos`."""
    config = facts.row.config
    wish = config.get("pacing") or {}
    shown = {"method": wish.get("method", NONE), "profile": wish.get("profile")}
    return {
        **shown,
        **_pace(shown["method"], facts, memory),
        "return_target": _returned(config, memory),
        "guarantee": GUARANTEE,
    }


def _pace(method: str, facts: Facts, memory: Memory) -> dict[str, Any]:
    if method == NONE:
        return {"says": NO_METHOD}
    try:
        state = memory.part(PACE)
        now = Pacing.from_bytes(state) if state else None
    except UnreadableMemory:
        now = None
    if now is None:
        return {"says": NOT_YET}
    if not now.spending.paces:
        return {"says": NO_RATE}
    multiplier = now.multiplier
    return {
        "says": HELD if multiplier else FREE,
        "set_by": BY_PACING,
        "share_of_value_bid": UNITS / (UNITS + multiplier),
        **_today(now, facts),
    }


def _today(now: Pacing, facts: Facts) -> dict[str, Any]:
    """Money of the local day: spent, planned by now, and when it would end."""
    plan, now_ms = now.spending.plan, max(facts.wall_ms, now.progress.clock_ms)
    starts_ms, ends_ms = profile.day_of(now_ms, plan.zone)
    same_day = now.progress.clock_ms >= starts_ms
    spent = now.progress.today if same_day else 0
    left = profile.left_today(Progress(now_ms, spent, now.progress.total), now_ms, plan)
    # A line item that began at noon was to spend nothing in the morning.
    began_ms = max(starts_ms, facts.row.created_ms, facts.row.config["flight"]["starts_ms"])
    began_ms = min(began_ms, now_ms)
    whole = profile.weight_between(began_ms, ends_ms, plan)
    gone = profile.weight_between(began_ms, now_ms, plan)
    return {
        "spent_today_nanos": spent,
        "planned_by_now_nanos": (spent + left) * gone // whole if whole else spent + left,
        "left_today_nanos": left,
        **_ending(spent, left, now_ms - began_ms, (now_ms, ends_ms)),
    }


def _ending(spent: int, left: int, gone_ms: int, rest: tuple[int, int]) -> dict[str, Any]:
    """When the day's money ends as it was spent so far; never said beyond the day."""
    now_ms, ends_ms = rest
    if spent <= 0:
        return {"money_ends_ms": None, "money_says": UNSPENT}
    at_ms = now_ms + left * max(gone_ms, 1) // spent
    if at_ms >= ends_ms:
        return {"money_ends_ms": None, "money_says": LASTS}
    return {"money_ends_ms": at_ms, "money_says": ENDS}


def _returned(config: Mapping[str, Any], memory: Memory) -> dict[str, Any] | None:
    """What a unit of money brought since the last reset, against what it must bring."""
    rules = return_rules(config)
    if rules is None:
        return None
    wish = config["return_target"]
    shown = {
        "set_by": BY_RETURN,
        "value_per_unit": wish["value_per_unit"] / 10**6,
        "strict": wish["strict"],
        "says": STRICT if wish["strict"] else ON_AVERAGE,
    }
    try:
        now = return_part.read(memory.part(RETURN), rules)
    except UnreadableMemory:
        return {**shown, "so_far": None}
    return {
        **shown,
        "so_far": now.valued / now.paid if now.paid else None,
        "value_nanos": now.valued,
        "paid_nanos": now.paid,
        "multiplier": now.multiplier,
    }
