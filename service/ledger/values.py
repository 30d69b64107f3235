"""What a reported value does: it moves no money, it becomes a lesson, once."""

from __future__ import annotations

from typing import NamedTuple

from service.ledger.entries import Entry, conflict
from service.ledger.settle import Slots

CEILINGS_MAX = 100  # A value of more than so many ceilings is an error of unit, not a value.


class Value(NamedTuple):
    """One reported value of one bid, in nanos."""

    bid: bytes
    event_id: str
    amount: int
    corrects: str | None = None
    at: str | None = None


class ValueVerdict(NamedTuple):
    """The receipt's status (and code when refused) and what to append."""

    status: str
    entry: Entry | None = None
    code: str | None = None
    clipped: bool = False


def judge(value: Value, slots: Slots, *, ceiling: int, arrival: str) -> ValueVerdict:
    """
    Decide one value; the caller holds the lock of the line item's balance.

    Args:
        slots: Everything known of this bid.
        ceiling: Largest value of one event in nanos; what lies above is taught at it.
        arrival: "once" or "accrues".
    """
    if value.amount > CEILINGS_MAX * ceiling:
        return ValueVerdict("refused", code="value_out_of_range")
    result = slots.get("result")
    # Feeds overtake one another; a bill proves the win as well as its notice does.
    if result is None and "billed" not in slots:
        return _park(value, slots, arrival)
    if result is not None and result[0] != "won":
        return ValueVerdict("refused", code="not_won")
    return _teach(value, slots, ceiling, arrival)


def unparked(slots: Slots, bid: bytes) -> list[Entry]:
    """The lessons that waited for this bid's win or bill and are not taught yet."""
    parked = [body for kind, body in slots.values() if kind == "parked"]
    return [
        Entry("value", {**body, "was": None, "parked": True}, bid, f"value:{body['event_id']}")
        for body in parked
        # A bill may have let them out before the win does, or the other way round.
        if f"value:{body['event_id']}" not in slots
    ]


def brought(slots: Slots) -> int:
    """What this bid's impression has brought so far, corrections in place of what they correct."""
    bodies = (body for kind, body in slots.values() if kind == "value")
    return sum(int(body["amount"]) - int(body["was"] or 0) for body in bodies)


def _park(value: Value, slots: Slots, arrival: str) -> ValueVerdict:
    # What it corrects would have to wait too, and in what order they would be taught is unclear.
    if value.corrects is not None:
        return ValueVerdict("refused", code="no_such_event")
    slot = f"parked:{value.event_id}"
    if slot in slots:
        return _again(value, slots, slot)
    if arrival == "once" and any(kind == "parked" for kind, _ in slots.values()):
        return _beside(value, slots)
    return ValueVerdict("parked", Entry("parked", _said(value), value.bid, slot))


def _teach(value: Value, slots: Slots, ceiling: int, arrival: str) -> ValueVerdict:
    slot = f"value:{value.event_id}"
    if slot in slots:
        return _again(value, slots, slot)
    was: int | None = None
    events = {body["event_id"]: body for kind, body in slots.values() if kind == "value"}
    corrected = {body["corrects"] for body in events.values()}
    if value.corrects is not None:
        if value.corrects not in events:
            return ValueVerdict("refused", code="no_such_event")
        # Two corrections of one event contradict each other: the first stands, as in every slot.
        if value.corrects in corrected:
            return _beside(value, slots)
        was = int(events[value.corrects]["amount"])
    elif arrival == "once" and events:
        return _beside(value, slots)
    # In full, beyond the ceiling too: the fold cuts it, and a raised ceiling refolds.
    entry = Entry("value", _said(value) | {"was": was}, value.bid, slot)
    return ValueVerdict("recorded", entry, clipped=value.amount > ceiling)


def _again(value: Value, slots: Slots, slot: str) -> ValueVerdict:
    body = slots[slot][1]
    if (body["amount"], body["corrects"]) == (value.amount, value.corrects):
        return ValueVerdict("duplicate")
    return _beside(value, slots)


def _beside(value: Value, slots: Slots) -> ValueVerdict:
    entry = conflict(value.bid, _said(value))
    return ValueVerdict("conflict", None if entry.slot in slots else entry)


def _said(value: Value) -> dict[str, object]:
    return {
        "event_id": value.event_id,
        "amount": value.amount,
        "corrects": value.corrects,
        "at": value.at,
    }
