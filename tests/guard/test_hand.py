"""The money in a worker's hand: never more than was leased, never after its time."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.guard.hand import COUNTER_MAX, Given, Hand, SliceInHand


def fresh(
    amount: int = 100, *, name: str = "garden", mark: int = 1, until: float = 30.0
) -> SliceInHand:
    """A slice leased at second 0 of the boot clock."""
    return SliceInHand(bytes([mark]) * 16, name, amount, 739_951, 0.0, until)


@given(some.integers(1, 1000), some.lists(some.integers(-5, 400), max_size=40))
def test_a_slice_never_gives_more_than_it_has(amount: int, prices: list[int]) -> None:
    """What was taken is at most the amount; what does not fit is refused and takes nothing."""
    held = fresh(amount)
    taken: list[int] = []
    for price in prices:
        if 0 < price <= amount - sum(taken):
            assert held.take(price) == len(taken)
            taken.append(price)
        else:
            with pytest.raises(ValueError, match="not in this slice"):
                held.take(price)

    assert (held.issued, held.bids, held.free) == (sum(taken), len(taken), amount - sum(taken))


def test_a_slice_goes_to_its_last_nano() -> None:
    """The whole amount may be bid, and nothing after."""
    held = fresh(7)
    held.take(7)

    assert held.free == 0
    with pytest.raises(ValueError, match="not in this slice"):
        held.take(1)


def test_a_slice_has_room_for_so_many_bids() -> None:
    """The counter of a ticket has 32 bits; a slice ends before it would run over."""
    held = fresh()
    held.bids = COUNTER_MAX - 1
    held.take(1)
    with pytest.raises(ValueError, match="not in this slice"):
        held.take(1)


@pytest.mark.parametrize(
    ("now", "usable"), [(0.0, True), (29.999, True), (30.0, False), (31.0, False)]
)
def test_a_slice_is_used_until_its_time_is_over(now: float, usable: bool) -> None:
    """At the very moment it ends it is retired, with exactly what it issued."""
    hand, held = Hand(), fresh()
    hand.receive(held)
    held.take(30)
    found = hand.usable("garden", now)

    assert found is (held if usable else None)
    assert hand.given == ([] if usable else [Given(held.id, "garden", 30, 1, 0)])
    assert hand.usable("garden", 0.0) is found


def test_an_empty_hand_has_nothing() -> None:
    """Of a line item without a slice nothing can be used or retired."""
    hand = Hand()
    hand.retire("garden")

    assert hand.usable("garden", 0.0) is None
    assert hand.given == []


def test_a_slice_that_is_replaced_is_retired() -> None:
    """The old one is given back with its exact sum and its passes; the new one starts empty."""
    hand, old, new = Hand(), fresh(mark=1), fresh(mark=2)
    hand.receive(old)
    old.take(30)
    old.take(12)
    hand.under_floor["garden"] = 5
    hand.receive(new)

    assert hand.usable("garden", 1.0) is new
    assert hand.given == [Given(old.id, "garden", 42, 2, 5)]
    assert hand.under_floor == {}


def test_the_time_of_each_slice_is_its_own() -> None:
    """Only what is over leaves the hand; on a stop everything does, and once."""
    hand = Hand()
    hand.receive(fresh(name="garden", mark=1, until=10.0))
    hand.receive(fresh(name="orchard", mark=2, until=20.0))
    hand.retire_expired(10.0)

    assert [g.line_item for g in hand.given] == ["garden"]
    hand.retire_all()
    hand.retire_all()
    assert [g.line_item for g in hand.given] == ["garden", "orchard"]


def test_no_price_leaves_a_slice_after_it_left_the_hand() -> None:
    """A given slice is found no more, so its issued sum can never grow after it was read."""
    hand = Hand()
    hand.receive(fresh())
    hand.retire("garden")

    assert hand.usable("garden", 0.0) is None
    assert hand.slices == {}
