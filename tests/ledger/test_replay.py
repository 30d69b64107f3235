"""The second opinion on money: a replay of what was said agrees with what was booked."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.ledger.replay import replay
from tests.ledger.tale import Tale

amounts = some.integers(1, 60)
names = some.integers(0, 5)
kinds = some.sampled_from(["won", "lost", "void", "billed"])
steps = some.lists(
    some.one_of(
        some.tuples(some.just("lease"), amounts),
        some.tuples(some.just("bid"), names, some.integers(1, 12)),
        some.tuples(some.sampled_from(["retire", "close", "unbill", "foreign"]), names),
        some.tuples(kinds, names, some.integers(0, 15)),
        some.tuples(kinds, names, some.integers(0, 15)),
        some.tuples(some.sampled_from(["budget", "daily"]), some.integers(0, 150)),
    ),
    max_size=60,
)


def happen(tale: Tale, step: tuple[Any, ...]) -> None:
    """Turn a random step into an event that can happen now; what cannot is passed over."""
    verb, first, *rest = step
    slices, bids = list(tale.slices), list(tale.bids)
    words: list[Any] = []
    if verb in ("won", "lost", "void", "billed"):
        words = [verb, bids[first % len(bids)], *rest[: verb != "void"]] if bids else []
    elif verb == "lease":
        amount = min(first, tale.account.free, tale.day.free)
        words = [verb, f"s{len(slices)}", amount] if amount else []
    elif verb == "bid":
        of = slices[first % len(slices)] if slices else ""
        fits = of and tale.slices[of].state == "open"
        fits = fits and sum(tale.issued[of]) + rest[0] <= tale.slices[of].amount
        words = [verb, f"b{len(bids)}", of, rest[0]] if fits else []
    elif verb == "foreign":
        words = [verb, bids[first % len(bids)]] if bids else []
    elif verb in ("retire", "close", "unbill"):
        words = _ending(tale, verb, slices[first % len(slices)]) if slices else []
    else:
        words = [verb, first] if verb == "daily" or first >= tale.account.spent else []
    if len(words) > 1:
        tale.tell(" ".join(map(str, words)))


def _ending(tale: Tale, verb: str, name: str) -> list[str]:
    state = tale.slices[name].state
    if verb == "retire":
        return [verb, name] if state == "open" else []
    bills = ["and_bills"] if verb == "unbill" else []
    # A closed slice is closed once more only for what nobody billed.
    again = bool(bills) and tale.slices[name].owed > 0
    return ["close", name, *bills] if state != "closed" or again else []


@pytest.mark.parametrize("spend_on", ["won", "billed"])
@settings(max_examples=400)
@given(steps=steps)
def test_replay_agrees_after_every_step(spend_on: str, steps: list[tuple[Any, ...]]) -> None:
    """Whatever happens in whatever order, V1 to V7 hold of the pure rules at every moment."""
    tale = Tale(spend_on, 100)
    for step in steps:
        happen(tale, step)
        assert tale.faults() == [], step


Said = tuple[str, str, dict[str, Any]]
LEASE: Said = ("lease", "", {"slice": "s", "amount": 40})
CREATE: Said = ("create", "", {"budget": 100})


def said(kind: str, price: int | None = None, **more: Any) -> Said:
    """An outcome of one bid of 10 out of the slice s."""
    return kind, "b", {"said": kind, "price": price, "bid": 10, "slice": "s", **more}


def test_replay_reads_nothing_of_what_was_booked() -> None:
    """The movements an entry might carry are not looked at, so they cannot mislead."""
    entries = [CREATE, LEASE, said("won", 7, spent=99, owed=99, pays=True)]
    told = replay("won", entries)

    assert (told.spent, told.held, told.unfunded, told.disputed) == (7, 30, 0, 0)


def test_other_kinds_move_nothing() -> None:
    """Lessons, ticks and contradictions about values are no business of the books."""
    other: list[Said] = [
        (kind, "b", {"amount": 5}) for kind in ("value", "parked", "tick", "conflict")
    ]

    assert replay("won", [CREATE, LEASE, *other]).held == 40


def test_what_a_slice_owed_falls_with_it() -> None:
    """Closing for good drops what nobody billed."""
    close = ("close", "", {"slice": "s", "released": 30, "unbilled": 7})

    assert replay("billed", [CREATE, LEASE, said("won", 7)]).held == 37
    assert replay("billed", [CREATE, LEASE, said("won", 7), close]).held == 0


def test_a_slice_is_put_down_once() -> None:
    """Whoever booked it twice freed money that was not there, and the replay does not follow."""
    retire: Said = ("retire", "", {"slice": "s", "freed": 15})

    assert replay("won", [CREATE, LEASE, retire, retire]).held == 25


def test_spend_of_a_day_is_sure_when_its_slice_is_known() -> None:
    """A ticket without a slice may name a day that had no row; what is unfunded is no spend."""
    known, foreign = said("won", 7, day="monday"), said("won", 6, day="monday")
    strange = (foreign[0], "c", {**foreign[2], "slice": None})
    unfunded = (foreign[0], "d", {**foreign[2], "slice": None, "price": 9, "bid": 90})

    assert replay("won", [CREATE, LEASE, known, strange]).days == {"monday": [7, 6]}
    assert replay("won", [("create", "", {"budget": 40}), LEASE, unfunded]).days == {}
