"""Rows as people read them: what an entry, a decision or a journal row says, in our words; pure.

Names end in `_nanos` or `_ms` here; the edge writes amounts, prices and times out of them.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

from service.guard.ticket import ref_of
from service.ledger.cancelling import PARTS, Cancelled
from service.store.charting import Chart, Quantiles

KINDS = (
    *("create", "edit", "lease", "retire", "close", "closed", "tick", "won", "lost", "void"),
    *("billed", "value", "parked", "conflict", "reversal", "reconcile", "prior", "reset"),
    *("retract", "rewind", "quarantine"),
)
# Kinds that move money or say how much may be moved.
MONEY_KINDS = (
    *("create", "edit", "lease", "retire", "close", "won", "lost", "void", "billed"),
    *("conflict", "reversal", "reconcile"),
)
LESSON_KINDS = tuple(PARTS)

# Members of bodies that are money or moments, and what they are called outside.
_NAMES = {
    "price": "clearing_cpm_nanos",
    "to_win": "to_win_cpm_nanos",
    "bid": "bid_cpm_nanos",
    "hint": "value_hint_nanos",
    "guess": "expected_per_impression_nanos",
    "ends_ms": "flight_ends_ms",
    "at": "happened_at",
    "won_ms": "won_service_ms",
    **{name: f"{name}_nanos" for name in ("owed", "freed", "released", "unbilled", "brought")},
    **{name: f"{name}_nanos" for name in ("budget", "daily_budget", "amount", "spent", "typical")},
    **{name: f"{name}_nanos" for name in ("was", "total_was", "per_impression", "unfunded")},
}


def entry_row(row: Any) -> dict[str, Any]:
    """An entry of the stream."""
    body = said(row.body)
    return {
        "seq": row.seq,
        "kind": row.kind,
        "at_ms": row.at_ms,
        "ref": ref_of(bytes(row.bid)) if row.bid is not None else None,
        "slot": row.slot,
        "cost_nanos": row.cost,
        "says": _named(body, row.kind),
    }


def money_row(row: Any) -> dict[str, Any]:
    """
    An entry as the ledger has it: what it cost, and by how much it changed what is held.

    `held` is null where the entry alone does not say: a bill, a win that became void.
    """
    told = entry_row(row)
    return {**told, "held_nanos": _held(row.kind, row.slot, said(row.body))}


def lesson_row(
    row: Any, left: Mapping[str, Any] | None, cancelled: Cancelled, ceiling: int
) -> dict[str, Any]:
    """
    An entry that a learner folds, and what it taught.

    Args:
        left: What is left of its body where something was cancelled; None: it teaches no more.
        ceiling: The largest value of one event that is taught, in nanos.
    """
    # Kinds of later releases teach this one nothing, and must not break a page.
    parts = PARTS.get(row.kind, frozenset())
    rest = cancelled.leaves(row.seq, row.kind) if left is not None else frozenset[str]()
    told = entry_row(row)
    return {
        **{name: told[name] for name in ("seq", "kind", "at_ms", "ref")},
        "teaches": sorted(rest),
        "cancelled": sorted(parts - rest),
        "taught": _taught(row.kind, left or {}, rest, ceiling),
    }


def decision_row(row: Any) -> dict[str, Any]:
    """A logged decision, a bid or a pass."""
    return {
        "number": row.number,
        "at_ms": row.at_ms,
        "request_id": row.request_id,
        "ref": row.ref,
        "source": row.source,
        "floor_cpm_nanos": row.floor,
        "bid_cpm_nanos": row.price,
        "pass": row.reason,
        "set_by": row.set_by,
        "snapshot": row.snapshot,
        "test": bool(row.test),
    }


def journal_row(row: Any) -> dict[str, Any]:
    """A row of the journal; its detail as the edge writes configurations."""
    return {
        "number": row.number,
        "at_ms": row.at_ms,
        "actor": row.actor,
        "action": row.action,
        "line_item": None if row.line_item == "*" else row.line_item,
        "reason": row.reason,
        "detail": said(row.detail),
    }


def chart_told(chart: Chart) -> dict[str, Any]:
    """A chart step by step; prices are middles of bins, so their quantiles are within 9 %."""
    return {
        "line_item": chart.line_item,
        "step_s": chart.step_ms // 1000,
        "entries_not_counted_yet": chart.behind,
        "prices_within": "9 %",
        "steps": [
            {
                "at_ms": bucket.at_ms,
                "cost_nanos": bucket.cost,
                "value_nanos": bucket.value,
                "counts": bucket.counts,
                "passes": bucket.passes,
                "set_by": bucket.set_by,
                "bid": _quantiles(bucket.bids),
                "clearing": _quantiles(bucket.clearing),
            }
            for bucket in chart.buckets
        ],
    }


def said(told: str) -> dict[str, Any]:
    """The members of a body; none where it is damaged, which the audit will say."""
    try:
        body = json.loads(told)
    except ValueError:
        return {}
    return body if isinstance(body, dict) else {}


def _quantiles(prices: Quantiles | None) -> dict[str, int] | None:
    if prices is None:
        return None
    of = (("p10", prices.low), ("median", prices.median), ("p90", prices.high))
    return {f"{name}_cpm_nanos": price for name, price in of}


def _named(body: Mapping[str, Any], kind: str) -> dict[str, Any]:
    named = dict[str, Any]()
    for name, value in body.items():
        if isinstance(value, Mapping):
            named[name] = _named(value, kind)
        elif kind == "value" and name == "amount":
            named["value_nanos"] = value
        else:
            named[_NAMES.get(name, name)] = value
    return named


def _held(kind: str, slot: str | None, body: Mapping[str, Any]) -> int | None:
    """The change of what is held, in nanos, as far as the entry itself says."""
    if kind == "lease":
        return _whole(body, "amount")
    if kind == "retire":
        return -_whole(body, "freed")
    if kind == "close":
        return -_whole(body, "released") - _whole(body, "unbilled")
    # What these free hangs on the entry they follow, which is not in the row.
    if kind == "billed" or slot == "void":
        return None
    if kind in ("won", "lost", "void") and not body.get("late"):
        return _whole(body, "owed") - _whole(body, "bid")
    return 0


def _taught(
    kind: str, body: Mapping[str, Any], rest: frozenset[str], ceiling: int
) -> dict[str, Any]:
    """What the parts that are left add to a learner."""
    taught = dict[str, Any]()
    if "market" in rest:
        taught["rounds"] = _whole(body, "round") + _whole(body, "rounds")
        if kind in ("tick", "retire"):
            taught["under_floor"] = _whole(body, "under_floor")
        if kind in ("won", "lost"):
            taught["source"] = body.get("source")
            taught["clearing_cpm_nanos"] = body.get("price") if kind == "won" else None
            taught["to_win_cpm_nanos"] = body.get("to_win")
    if "value" in rest and kind == "won":
        taught["impressions"] = 1
    if "value" in rest and kind == "value":
        amount, was = _whole(body, "amount"), body.get("was")
        taught |= {"value_nanos": min(amount, ceiling), "clipped": amount > ceiling}
        taught["instead_of_nanos"] = was if isinstance(was, int) else None
    if kind == "prior" and rest:
        taught |= _named(body, kind)
    if kind == "reset" and rest:
        taught["forgets"] = "all before it"
    return taught


def _whole(body: Mapping[str, Any], name: str) -> int:
    value = body.get(name)
    # A damaged body is the audit's to report; a page still has to be shown.
    return value if isinstance(value, int) else 0
