"""What people see of a line item, composed of plain facts; pure, so a test can read it."""

from __future__ import annotations

from typing import Any

from service.catalog import limits_of
from service.decision.comparing import show_control
from service.decision.curves import curves
from service.decision.describing import describe
from service.decision.learnability import learnability
from service.decision.price import ready
from service.decision.terms import Terms
from service.foreseeing import summary
from service.guard.gate import clear
from service.learner.memory import Memory
from service.learner.tally import Tally
from service.spending import show_spending
from service.store.reading import Facts


def show(facts: Facts) -> dict[str, Any]:
    """The state of a line item; money in nanos under names that end in `_nanos`."""
    memory = Memory.from_bytes(facts.snapshot.state)
    learnt = describe(ready(memory, Terms.from_config(facts.row.config)))
    return {
        "line_item": facts.row.id,
        "version": facts.row.version,
        "status": _status({freeze["source"] for freeze in facts.row.freezes}),
        "currency": facts.row.config["currency"],
        "bid": _bid(facts, learnt),
        "certainty": learnt,
        "learner": _learner(facts, memory.total),
        "money": _money(facts),
        "day": _day(facts),
        "pacing": show_spending(facts, memory),
        "control": show_control(facts.row.config, memory),
        "learnability": learnability(facts.row.config),
        "feed": {"last_ms": facts.feed, "quarantined": facts.quarantined},
        "passes_of_last_1000": facts.passes,
        "freezes": facts.row.freezes,
        "tripwires": summary(facts.row.config, facts.findings),
    }


def show_curve(facts: Facts) -> dict[str, Any]:
    """What is known of competing bids; money in nanos under names that end in `_nanos`."""
    memory = Memory.from_bytes(facts.snapshot.state)
    found = curves(ready(memory, Terms.from_config(facts.row.config)))
    fees = facts.row.config.get("fees")
    prices = "with the line item's fees" if fees else "as bid: the line item has no fees"
    return {"line_item": facts.row.id, "snapshot": facts.snapshot.seq, "prices": prices, **found}


def _status(sources: set[str]) -> str:
    """In one word: what it waits for, if it may not bid."""
    # Closed is for good, so no other reason matters any more.
    if "closed" in sources:
        return "closed"
    if "restore" in sources:
        return "reconcile"
    return "frozen" if sources else "open"


def _bid(facts: Facts, learnt: dict[str, Any]) -> dict[str, Any]:
    """What an opportunity without a floor would be answered now, and what sets it."""
    limits = limits_of(facts.row)
    said = {"method": learnt["method"], "snapshot": facts.snapshot.seq}
    none = {"price_cpm_nanos": None, "set_by": None}
    if facts.snapshot.halted:
        return said | none | {"pass": "learner_halted"}
    if learnt["bid_nanos"] is None:
        return said | none | {"pass": learnt["pass"]}
    cleared = clear(learnt["bid_nanos"], learnt["set_by"], limits, 0, limits.cap)
    if isinstance(cleared, str):
        return said | none | {"pass": cleared}
    # Fees alone may be more than the price; what leaves is never below nothing.
    net = max(0, limits.fees.net(cleared.price))
    return said | {"price_cpm_nanos": net, "set_by": cleared.set_by, "pass": None}


def _learner(facts: Facts, tally: Tally) -> dict[str, Any]:
    wins = max(tally.wins, 1)
    return {
        "snapshot": facts.snapshot.seq,
        "published_ms": facts.snapshot.published_ms,
        "halted": facts.snapshot.halted,
        "entries_behind": facts.balance["seq"] - facts.learner_seq,
        # With more line items at work than the clerk can teach at once, each waits longer.
        "behind_ms": 0 if facts.unread_ms is None else max(0, facts.wall_ms - facts.unread_ms),
        "rounds": tally.rounds,
        "wins": tally.wins,
        "losses": tally.losses,
        "win_rate": tally.wins / tally.rounds if tally.rounds else None,
        "mean_price_cpm_nanos": tally.paid // wins if tally.wins else None,
        "wins_with_known_value": tally.known,
        "wins_with_value_above_zero": tally.converted,
        "values_clipped": tally.clipped,
    }


def _money(facts: Facts) -> dict[str, Any]:
    balance = facts.balance
    return {
        "budget_nanos": balance["budget"],
        "target_nanos": balance["target"],
        "spent_nanos": balance["spent"],
        "held_nanos": balance["held"],
        # A target lowered below what is spent leaves nothing free, not less than nothing.
        "free_nanos": max(0, balance["target"] - balance["spent"] - balance["held"]),
        "unfunded_nanos": balance["unfunded"],
        "disputed_nanos": balance["disputed"],
        "slices": [
            {
                "state": row["state"],
                "slices": row["slices"],
                "remaining_nanos": row["remaining"],
                "owed_nanos": row["owed"],
            }
            for row in facts.slices
        ],
    }


def _day(facts: Facts) -> dict[str, Any] | None:
    """Today's row, unless nothing was leased today or there is no daily budget."""
    if facts.day is None or facts.row.config["daily_budget"] is None:
        return None
    return {
        "day": facts.day["day"],
        "time_zone": facts.row.config["flight"]["time_zone"],
        "budget_nanos": facts.day["target"],
        "spent_nanos": facts.day["spent"],
        "held_nanos": facts.day["held"],
        "over_nanos": facts.day["over_spent"],
    }
