"""A replay in pieces, with the books packed away in between, equals the replay in one go."""

from __future__ import annotations

import json
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.ledger.replay import Replayed, Told, replay
from service.ledger.resuming import packed, recall, unpacked
from tests.ledger.tale import Tale
from tests.ledger.test_replay import happen, steps

NAMES = ("spent", "held", "unfunded", "disputed", "budget", "days", "strange")


def in_pieces(spend_on: str, entries: list[Told], ends: list[int]) -> Replayed:
    """Replay up to each end in turn; between two, the books are text."""
    books, start = Replayed(), 0
    for end in [*sorted(ends), len(entries)]:
        books = unpacked(json.loads(json.dumps(packed(books))))
        here = entries[start:end]
        bids = {bid for _, bid, _ in here if bid}
        recall(books, [entry for entry in entries[:start] if entry[1] in bids])
        books, start = replay(spend_on, here, books), max(start, end)
    return books


@pytest.mark.parametrize("spend_on", ["won", "billed"])
@settings(max_examples=300)
@given(steps=steps, ends=some.lists(some.integers(0, 60), max_size=6))
def test_pieces_equal_the_whole(
    spend_on: str, steps: list[tuple[Any, ...]], ends: list[int]
) -> None:
    """Wherever the cuts fall, between a win and its bill or a loss and its contradiction."""
    tale = Tale(spend_on, 100)
    for step in steps:
        happen(tale, step)
    entries: list[Told] = list(tale.entries)
    ends = [min(end, len(entries)) for end in ends]
    whole, pieces = replay(spend_on, entries), in_pieces(spend_on, entries, ends)
    assert [getattr(pieces, n) for n in NAMES] == [getattr(whole, n) for n in NAMES]


def test_what_is_over_is_not_packed() -> None:
    """A thousand closed slices and settled bids leave nothing but their sums."""
    entries: list[Told] = [("create", "", {"budget": 10**6})]
    for number in range(1000):
        name, bid = f"s{number}", f"b{number}"
        said = {"said": "won", "price": 7, "bid": 10, "slice": name, "day": "monday"}
        entries += [("lease", "", {"slice": name, "amount": 10}), ("won", bid, said)]
        entries.append(("close", "", {"slice": name, "released": 0, "unbilled": 0}))
    body = packed(replay("won", entries))
    assert (body["slices"], body["owed"], body["retired"]) == ({}, {}, [])
    assert (body["spent"], body["days"]) == (7000, {"monday": [7000, 0]})


def test_a_slice_that_was_never_leased_is_counted() -> None:
    """Closing and retiring what nobody leased is strange, in pieces as in one go."""
    closing: list[Told] = [
        ("close", "", {"slice": "s", "released": 0, "unbilled": 0}),
        ("retire", "", {"slice": "t", "freed": 0}),
    ]
    assert replay("won", closing).strange == in_pieces("won", closing, [1]).strange == 2
