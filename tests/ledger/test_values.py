"""What a reported value becomes: a lesson once, or a reason why not."""

from __future__ import annotations

from typing import Any

import pytest

from service.ledger.values import Value, judge, unparked

CEILING = 1000
Slots = dict[str, tuple[str, dict[str, Any]]]
Step = tuple[str, int, str | None, str]

WON: Slots = {"result": ("won", {})}
BILLED: Slots = {"billed": ("billed", {})}
LOST: Slots = {"result": ("lost", {})}
VOID: Slots = {"result": ("void", {})}

# Each story: arrival, what is known of the bid, then event id, amount, corrects and status.
STORIES: dict[str, tuple[str, Slots, list[Step]]] = {
    "every event of a win adds up": (
        "accrues", WON, [("e1", 5, None, "recorded"), ("e2", 7, None, "recorded")],
    ),
    "one event of a win stands": (
        "once", WON, [("e1", 5, None, "recorded"), ("e2", 7, None, "conflict")],
    ),
    "a bill is as good as a win": ("once", BILLED, [("e1", 5, None, "recorded")]),
    "the same content again": (
        "accrues", WON, [("e1", 5, None, "recorded"), ("e1", 5, None, "duplicate")],
    ),
    "other content of an event, sent twice": (
        "accrues", WON,
        [("e1", 5, None, "recorded"), ("e1", 6, None, "conflict"), ("e1", 6, None, "conflict"),
         ("e1", 5, None, "duplicate")],
    ),
    "a correction, and one of it": (
        "accrues", WON,
        [("e1", 5, None, "recorded"), ("e2", 3, "e1", "recorded"), ("e3", 9, "e2", "recorded"),
         ("e2", 3, "e1", "duplicate")],
    ),
    "a correction under once": (
        "once", WON, [("e1", 5, None, "recorded"), ("e2", 0, "e1", "recorded")],
    ),
    "a second correction of one event": (
        "accrues", WON,
        [("e1", 5, None, "recorded"), ("e2", 3, "e1", "recorded"), ("e3", 4, "e1", "conflict")],
    ),
    "a correction of nothing": ("accrues", WON, [("e2", 3, "e1", "no_such_event")]),
    "a correction of itself": ("accrues", WON, [("e1", 3, "e1", "no_such_event")]),
    "a value of a lost bid": ("accrues", LOST, [("e1", 5, None, "not_won")]),
    "a value of a void bid": ("accrues", VOID, [("e1", 5, None, "not_won")]),
    "a value of a bid that was billed and then called lost": (
        "accrues", {**BILLED, "conflict:x": ("conflict", {})}, [("e1", 5, None, "recorded")],
    ),
    "before its win": (
        "accrues", {},
        [("e1", 5, None, "parked"), ("e1", 5, None, "duplicate"), ("e1", 6, None, "conflict"),
         ("e2", 7, None, "parked"), ("e3", 1, "e1", "no_such_event")],
    ),
    "before its win, under once": (
        "once", {},
        [("e1", 5, None, "parked"), ("e2", 7, None, "conflict"), ("e1", 5, None, "duplicate")],
    ),
    "as much as can be": ("accrues", WON, [("e1", 100 * CEILING, None, "recorded")]),
    "more than can be": ("accrues", WON, [("e1", 100 * CEILING + 1, None, "value_out_of_range")]),
    "more than can be, before its win": (
        "accrues", {}, [("e1", 100 * CEILING + 1, None, "value_out_of_range")],
    ),
}  # fmt: skip


def tell(slots: Slots, arrival: str, step: Step) -> str:
    """Judge one value and keep what it appends; returns its status, or its code if refused."""
    event_id, amount, corrects, _ = step
    verdict = judge(
        Value(b"b", event_id, amount, corrects), slots, ceiling=CEILING, arrival=arrival
    )
    if verdict.entry is not None and verdict.entry.slot is not None:
        assert verdict.entry.slot not in slots, "the unique index would refuse this row"
        slots[verdict.entry.slot] = (verdict.entry.kind, dict(verdict.entry.body))
    return verdict.code or verdict.status


@pytest.mark.parametrize("name", STORIES)
def test_each_value_has_its_status(name: str) -> None:
    """Every value of a story ends as it should, and no place is filled twice."""
    arrival, known, steps = STORIES[name]
    slots = dict(known)

    assert [tell(slots, arrival, step) for step in steps] == [step[3] for step in steps]


def test_a_correction_says_what_it_replaces() -> None:
    """Each link of a chain replaces the amount of the link before it."""
    slots = dict(WON)
    chain: list[Step] = [("e1", 5, None, ""), ("e2", 3, "e1", ""), ("e3", 9, "e2", "")]
    for step in chain:
        tell(slots, "accrues", step)

    was = {slot: body["was"] for slot, (kind, body) in slots.items() if kind == "value"}
    assert was == {"value:e1": None, "value:e2": 5, "value:e3": 3}


@pytest.mark.parametrize(("amount", "clipped"), [(CEILING, False), (CEILING + 1, True)])
def test_a_value_above_the_ceiling_is_kept_in_full(amount: int, clipped: bool) -> None:
    """The receipt says that it is taught at the ceiling; the entry holds what was said."""
    verdict = judge(Value(b"b", "e1", amount), WON, ceiling=CEILING, arrival="accrues")

    assert verdict.clipped is clipped
    assert verdict.entry is not None
    assert verdict.entry.body["amount"] == amount


def test_the_win_brings_what_was_parked() -> None:
    """Values that came before their win become lessons with it, each in its own place."""
    slots: Slots = {}
    for step in [("e1", 5, None, ""), ("e2", 7, None, "")]:
        tell(slots, "accrues", step)
    slots["result"] = ("won", {})

    lessons = unparked(slots, b"b")
    told = [(e.kind, e.slot, e.body["amount"], e.body["was"]) for e in lessons]
    assert told == [("value", "value:e1", 5, None), ("value", "value:e2", 7, None)]


def test_what_was_parked_is_taught_once() -> None:
    """A bill and a win of the same bid do not both bring it, nor does a value sent again."""
    slots: Slots = {}
    tell(slots, "accrues", ("e1", 5, None, ""))
    slots["billed"] = ("billed", {})
    for lesson in unparked(slots, b"b"):
        slots[lesson.slot or ""] = (lesson.kind, dict(lesson.body))

    assert tell(slots, "accrues", ("e1", 5, None, "")) == "duplicate"
    slots["result"] = ("won", {})
    assert unparked(slots, b"b") == []


def test_a_lost_bid_teaches_nothing_of_what_was_parked() -> None:
    """The parked value stays where it is, and the same value again is refused."""
    slots: Slots = {}
    tell(slots, "accrues", ("e1", 5, None, ""))
    slots["result"] = ("lost", {})

    assert tell(slots, "accrues", ("e1", 5, None, "")) == "not_won"
    assert [kind for kind, _ in slots.values()] == ["parked", "lost"]
