"""The books that a drill's exchange keeps: every call, charge, receipt and look, by hand."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.commands.drill_record import (
    OK,
    REFUSED,
    SETTLED,
    UNKNOWN,
    History,
    Read,
    Sent,
    how_ended,
    of_state,
)
from service.commands.wire import Reply

NANOS = some.integers(0, 1000)


def row(price: int = 5, name: str = "a", first_s: float = 1.0) -> Sent:
    """A win that was sold."""
    return Sent(name, "ref", "result", "won", price, {}, first_s)


@pytest.mark.parametrize("status", [100, 201, 204, 301, 400, 404, 409, 429, 500, 502, 504])
def test_only_two_statuses_leave_a_call_undecided_or_kept(status: int) -> None:
    """200 promises, 503 says that it may have happened, and every other refuses."""
    assert how_ended(Reply(status, b"")) == REFUSED
    assert (how_ended(Reply(200, b"")), how_ended(Reply(503, b""))) == (OK, UNKNOWN)


def test_calls_are_counted_by_what_they_asked_and_how_they_ended() -> None:
    """Two of one kind are two."""
    books = History()
    for what, how in (("bid", OK), ("bid", OK), ("bid", UNKNOWN), ("outcome", OK)):
        books.ended(what, how)
    assert books.calls == {"bid ok": 2, "bid unknown": 1, "outcome ok": 1}


def test_a_win_is_charged_when_it_is_sold_and_acknowledged_once() -> None:
    """Whether or not anybody hears of it; a second receipt adds nothing."""
    books, sold = History(), row(7)
    books.sell(sold)
    assert (books.charged["a"], books.acknowledged["a"]) == (7, 0)
    for status in ("recorded", "duplicate", "late"):
        books.receive(sold, status, None)
    assert (books.charged["a"], books.acknowledged["a"]) == (7, 7)
    assert (books.calls, books.faults) == ({"receipt recorded": 1}, [])


@pytest.mark.parametrize("status", sorted(SETTLED))
def test_every_receipt_that_settles_is_counted_under_its_name(status: str) -> None:
    """Recorded, late, parked and duplicate all say that the outcome is there."""
    books, sold = History(), row()
    books.sell(sold)
    books.receive(sold, status, None)
    assert (books.calls[f"receipt {status}"], books.faults) == (1, [])
    assert sold.acknowledged_s is not None


@pytest.mark.parametrize("status", ["refused", "conflict", "quarantined", "", "RECORDED"])
def test_any_other_receipt_is_a_fault_and_acknowledges_nothing(status: str) -> None:
    """The word and its code are kept for whoever reads the drill."""
    books, sold = History(), row()
    books.sell(sold)
    books.receive(sold, status, "a_code")
    assert books.faults == [f"an outcome was {status}: a_code"]
    assert (sold.acknowledged_s, books.acknowledged["a"]) == (None, 0)


def test_line_items_are_kept_apart() -> None:
    """Money of one never stands for money of another."""
    books = History()
    for sold in (row(1, "a"), row(2, "b"), row(4, "a")):
        books.sell(sold)
    assert books.charged == {"a": 5, "b": 2}


def test_the_longest_delay_is_from_bid_to_receipt() -> None:
    """What was never acknowledged has none, and nothing at all has nothing."""
    books = History()
    assert books.delay_s_max == 0.0
    for first_s, acknowledged_s in ((1.0, 3.5), (2.0, None), (3.0, 4.0)):
        sold = row(first_s=first_s)
        sold.acknowledged_s = acknowledged_s
        books.sell(sold)
    assert books.delay_s_max == 2.5


@pytest.mark.parametrize(
    ("read", "words"),
    [
        (Read("a", 10, 6, 5, 6, 6, 6), "V1: spent 6 + held 5 > budget 10"),
        (Read("a", 10, 6, 4, 5, 6, 6), "lost: 5 booked, 6 was acknowledged"),
        (Read("a", 10, 6, 4, 7, 6, 6), "invented: 7 booked, 6 was charged"),
        (Read("a", 10, 11, 0, 0, 6, 6), "V1: spent 11 + held 0 > budget 10"),
    ],
)
def test_a_look_that_breaks_a_promise_says_which_with_its_numbers(read: Read, words: str) -> None:
    """The gravest first: money beyond the budget before money lost or made up."""
    books = History()
    books.look(read)
    assert (books.reads, books.faults) == (1, [f"a: {words}"])


@given(NANOS, NANOS, NANOS, NANOS, NANOS, NANOS)
@settings(max_examples=80, deadline=None)
def test_a_look_is_sound_just_where_all_three_promises_hold(
    budget: int, spent: int, held: int, cost: int, before: int, after: int
) -> None:
    """Within the budget, at least what was acknowledged, at most what was charged."""
    sound = spent + held <= budget and before <= cost <= after
    assert (Read("a", budget, spent, held, cost, before, after).fault() is None) is sound


def test_receipts_in_any_order_leave_the_same_books() -> None:
    """Three wins, told of in each of the six orders."""
    ends = set()
    for order in itertools.permutations(range(3)):
        books, sold = History(), [row(1), row(2), row(4, "b")]
        for one in sold:
            books.sell(one)
        for place in order:
            books.receive(sold[place], "recorded", None)
        ends.add((books.acknowledged["a"], books.acknowledged["b"], books.calls.total()))
    assert ends == {(3, 4, 3)}


def test_a_state_is_read_in_nanos_and_all_cost_is_in_it() -> None:
    """Spent, unfunded and disputed together are what an impression cost us."""
    books = {"budget": "10.00", "spent": "1.50", "held": "0.000000001"}
    state = {"money": {**books, "unfunded": "0.25", "disputed": "0.05"}}
    assert of_state(state) == (10**10, 1_500_000_000, 1, 1_800_000_000)
