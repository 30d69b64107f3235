"""The table of the promise, line by line: what each outcome does to money."""

from __future__ import annotations

import pytest

from service.ledger.accounts import Account, Slice
from service.ledger.settle import Outcome, Place, settle
from tests.ledger.stories import BILLED, WON
from tests.ledger.tale import NAMES, Tale

STORIES = [
    (on, *story) for on, all_ in (("won", WON), ("billed", BILLED)) for story in all_.items()
]
FRESH = Slice(b"s", "x", "w", "2026-12-01", 40, 40, 0, 0, 0, "open")
ACCOUNT = Account("x", 100, 100, 0, 40, 0, 0, 0, 0)


@pytest.mark.parametrize(("spend_on", "name", "story"), STORIES, ids=lambda word: word[:60])
def test_each_line_has_its_status_and_its_balances(spend_on: str, name: str, story: str) -> None:
    """Every event ends as its line says, moves nothing else, and breaks no promise."""
    tale, expected = Tale(spend_on, 100), dict.fromkeys(NAMES, 0)
    for line in filter(None, map(str.strip, story.splitlines())):
        event, _, ending = line.partition("->")
        status, *moved = ending.split() or ["-"]
        expected |= {k: int(v) for k, _, v in (pair.partition("=") for pair in moved)}
        assert (tale.tell(event), tale.balances()) == (status, expected), (name, line)
        assert tale.faults() == [], (name, line)


def outcome(kind: str, counter: int = 0) -> Outcome:
    """An outcome of a bid of 10."""
    return Outcome(kind, b"b", counter, 10, "default", 7 if kind in ("won", "billed") else None)


@pytest.mark.parametrize("kind", ["won", "lost", "void"])
@pytest.mark.parametrize(("counter", "ticked", "rounds"), [(0, 0, 1), (3, 4, 0), (4, 4, 1)])
def test_a_result_is_a_round_unless_a_tick_told_it(
    kind: str, counter: int, ticked: int, rounds: int
) -> None:
    """A bid counts as a round with its result or with the tick that covers it, never with both."""
    known = Slice(b"s", "x", "w", "2026-12-01", 40, 40, 0, ticked, ticked, "open")
    verdict = settle(outcome(kind, counter), Place(ACCOUNT, None, known, {}, "won"))

    assert verdict.rounds == rounds
    assert verdict.entry is not None
    assert verdict.entry.body["round"] == rounds


def test_billing_is_no_round_of_its_own() -> None:
    """The impression that is billed was counted, or will be, with its result."""
    verdict = settle(outcome("billed"), Place(ACCOUNT, None, FRESH, {}, "won"))

    assert verdict.rounds == 0
    assert verdict.entry is not None
    assert verdict.entry.body["round"] == 0


def test_the_entry_keeps_what_was_said() -> None:
    """All that came with an outcome stands in the stream, whether or not money moved."""
    said = Outcome("lost", b"b", 3, 10, "exchange-a", None, 12, "outbid", "2026-12-01T10:00:00Z")
    verdict = settle(said, Place(ACCOUNT, None, FRESH, {}, "won"))

    assert verdict.entry is not None
    assert verdict.entry.body == {
        "said": "lost", "price": None, "to_win": 12, "bid": 10, "counter": 3, "owed": 0,
        "source": "exchange-a", "why": "outbid", "at": "2026-12-01T10:00:00Z",
        "auction": "second", "round": 1, "late": False,
    }  # fmt: skip


def test_what_is_told_beside_the_content_makes_no_conflict() -> None:
    """Another reason or time with the same result is the same result again."""
    first = settle(outcome("won"), Place(ACCOUNT, None, FRESH, {}, "won")).entry
    assert first is not None
    slots = {"result": (first.kind, first.body)}
    again = Outcome("won", b"b", 0, 10, "default", 7, why="sent twice", at="2026-12-02T00:00:00Z")

    assert settle(again, Place(ACCOUNT, None, FRESH, slots, "won")).status == "duplicate"
