"""The plain rule's own requests and its own money: chosen by a keyed hash, bounded twice."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.guard.control import CONTROL, MAIN, WHOLE, Control
from service.guard.hand import Hand, SliceInHand
from service.guard.ticket import Ticket, TicketKeys

KEY = bytes(range(32))
TENTH = Control(WHOLE // 10, 2_000)


def slice_of(amount: int, number: int = 0) -> SliceInHand:
    """A slice of line item a."""
    return SliceInHand(bytes([number]) * 16, "a", amount, 1, 0.0, 100.0)


@pytest.mark.parametrize("share", [0.1, 0.5, 0.001])
def test_a_share_of_requests_is_chosen(share: float) -> None:
    """Of forty thousand names, within five standard errors; the same each time."""
    control = Control(round(share * WHOLE), 1)
    chosen = [control.chooses("a", f"op-{n}", KEY) for n in range(40_000)]
    assert abs(sum(chosen) - 40_000 * share) < 5 * (40_000 * share * (1 - share)) ** 0.5
    assert chosen == [control.chooses("a", f"op-{n}", KEY) for n in range(40_000)]


def test_the_choice_hangs_on_key_and_line_item() -> None:
    """Without the key nobody can foretell an arm, and two line items choose apart."""
    half = Control(WHOLE // 2, 1)
    names = [f"op-{n}" for n in range(1000)]
    mine = [half.chooses("a", name, KEY) for name in names]
    for other in (
        [half.chooses("a", name, KEY[::-1]) for name in names],
        [half.chooses("b", name, KEY) for name in names],
    ):
        assert 400 < sum(a == b for a, b in zip(mine, other, strict=True)) < 600


def test_a_larger_share_keeps_who_was_chosen() -> None:
    """Raising a share moves requests one way only, so that arms stay as they were."""
    small, large = Control(WHOLE // 20, 1), Control(WHOLE // 5, 1)
    for n in range(2000):
        assert large.chooses("a", f"op-{n}", KEY) or not small.chooses("a", f"op-{n}", KEY)


@given(some.integers(1, WHOLE // 2), some.integers(1, 10**6), some.lists(some.booleans()))
def test_the_arm_never_issues_more_than_its_share(
    share: int, price: int, wishes: list[bool]
) -> None:
    """Whatever it wishes for, of all that was leased."""
    control, leased, issued = Control(share, price), 0, 0
    for wish in wishes:
        leased += 3 * price
        if wish and control.has_room(leased, issued):
            issued += price
        assert issued * WHOLE <= share * leased


def test_the_hand_counts_earlier_slices_and_the_one_in_it() -> None:
    """A slice of one bid has no room for a tenth; ten of them, used up, have."""
    hand = Hand()
    assert not hand.has_room("a", TENTH)
    for number in range(9):
        hand.receive(slice_of(2_000, number))
        assert not hand.has_room("a", TENTH)
        hand.slices["a"].take(2_000)
    hand.receive(slice_of(2_000, 9))
    assert hand.has_room("a", TENTH)
    hand.by_control("a", 2_000)
    assert not hand.has_room("a", TENTH)
    assert not hand.has_room("b", TENTH)


def test_what_a_slice_never_issued_gives_no_room_later() -> None:
    """What went back unused was nobody's to share."""
    hand = Hand()
    hand.receive(slice_of(20_000))
    assert hand.has_room("a", TENTH)
    hand.retire("a")
    assert not hand.has_room("a", TENTH)


def test_the_arm_ends_with_its_share_of_the_budget() -> None:
    """A tenth of 100,000 is five bids of 2,000; the sixth is not left to it."""
    assert TENTH.open(100_000, 8_000)
    assert not TENTH.open(100_000, 8_001)


@pytest.mark.parametrize("arm", [MAIN, CONTROL])
@pytest.mark.parametrize("test", [True, False])
def test_the_arm_travels_in_the_ticket(arm: str, test: bool) -> None:
    """Beside the other flags, signed like the rest."""
    keys = TicketKeys([b"secret"])
    ticket = Ticket("a", "s", bytes(16), 1, 5, 6, 7, bytes(8), test, auction="first", arm=arm)
    assert keys.verify(keys.sign(ticket)) == ticket
