"""What is cancelled teaches no more, and what is left reads as if it had never been said."""

from __future__ import annotations

from typing import Any

import pytest

from service.ledger.cancelling import ALL, Cancelled, Finder, Named, left, retold

BID, OTHER = bytes(16), bytes([1]) * 16


def value(event: str, amount: int, was: int | None = None, corrects: str | None = None) -> Any:
    """The body of a value."""
    return {"event_id": event, "amount": amount, "was": was, "corrects": corrects, "win": {}}


def find(named: Named, cancelled: Cancelled | None = None) -> Finder:
    """Read a small stream: two sources, a tick, values, a correction, a reset."""
    finder = Finder(named, cancelled or Cancelled())
    rows: list[tuple[str, bytes | None, dict[str, Any]]] = [
        ("won", BID, {"source": "north"}),
        ("won", OTHER, {"source": "south"}),
        ("tick", None, {"rounds": 3}),
        ("value", BID, value("a", 5)),
        ("value", BID, value("b", 3, 5, "a")),
        ("lost", bytes([2]) * 16, {"source": "north"}),
        ("reset", None, {}),
        ("value", OTHER, value("a", 7)),
    ]
    for seq, (kind, bid, body) in enumerate(rows, 1):
        finder.take(seq, kind, bid, seq * 10, body)
    return finder


@pytest.mark.parametrize(
    ("named", "seqs"),
    [
        (Named("both", bids=frozenset({BID})), [1, 4, 5]),
        (Named("value", bids=frozenset({BID})), [1, 4, 5]),
        (Named("market", bids=frozenset({BID})), [1]),
        (Named("value", events=frozenset({"b"})), [5]),
        (Named("value", events=frozenset({"a"})), [4, 5, 8]),  # The correction goes along.
        (Named("both", source="south"), [2, 8]),
        (Named("market", source="north"), [1, 6]),
        (Named("both", from_ms=20, until_ms=50), [2, 3, 4, 5]),
        (Named("market", from_ms=30), [3, 6]),
        (Named("both", source="north", until_ms=41), [1, 4, 5]),
    ],
)
def test_a_name_means_these_entries(named: Named, seqs: list[int]) -> None:
    """Bids, events, a source, a span; ticks belong to spans, resets to nobody."""
    assert find(named).seqs == seqs


def test_what_is_cancelled_already_is_not_found_again() -> None:
    """So that an order given twice changes nothing the second time."""
    found = find(Named("both", source="north"))
    assert found.spans == [(1, 1, "both"), (4, 6, "both")]
    assert find(Named("both", source="north"), Cancelled(found.spans)).spans == []
    again = find(Named("both", bids=frozenset({BID})), Cancelled([(1, 1, "value")]))
    assert again.seqs == [1, 4, 5]


def test_a_win_taught_in_part_says_which() -> None:
    """The fold reads `only`; an entry of no lesson stays, to move the clock."""
    body = {"price": 1}
    assert left(1, "won", body, Cancelled()) == body
    assert left(1, "won", body, Cancelled([(1, 2, "value")])) == {"price": 1, "only": "market"}
    assert left(1, "won", body, Cancelled([(1, 1, "market")])) == {"price": 1, "only": "value"}
    assert left(1, "won", body, Cancelled([(1, 1, "market"), (1, 1, "value")])) is None
    assert left(1, "lease", body, Cancelled([(1, 1, ALL)])) == body
    assert left(1, "reset", {}, Cancelled([(1, 1, "both")])) == {}
    assert left(1, "reset", {}, Cancelled([(1, 1, ALL)])) is None


def test_values_are_told_again_without_the_cancelled_ones() -> None:
    """What came before counts only what still counts; a correction of nothing is a first."""
    rows = [
        (1, "won", {}),
        (2, "value", value("a", 5)),
        (3, "value", value("b", 3)),
        (4, "value", value("c", 2, 5, "a")),
    ]
    told = retold(rows, Cancelled([(2, 2, "value")]))
    assert told[2] is None
    assert told[3] == {**value("b", 3), "total_was": 0}
    assert told[4] == {**value("c", 2, None, "a"), "total_was": 3}
    whole = retold(rows, Cancelled([(9, 9, "value")]))
    assert [whole[n]["total_was"] for n in (2, 3, 4)] == [0, 5, 8]  # type: ignore[index]
    assert whole[4]["was"] == 5  # type: ignore[index]


def test_an_impression_taken_out_can_bring_nothing_later() -> None:
    """Otherwise it would add to what impressions bring without being one of them."""
    rows = [(1, "won", {}), (2, "value", value("a", 5))]
    assert retold(rows, Cancelled([(1, 1, "value")]))[2] is None
    kept = retold(rows, Cancelled([(1, 1, "market")]))[2]
    assert kept is not None
    assert "win" not in kept  # A tree cannot weigh it without its price.
    billed = [(1, "won", {}), (2, "billed", {}), (3, "value", value("a", 5))]
    assert retold(billed, Cancelled([(2, 2, "value")], "billed"))[3] is None
    assert retold(billed, Cancelled([(2, 2, "value")], "won"))[3] is not None
