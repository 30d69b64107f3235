"""May this price leave? Every check at its edge, and which of them speaks first."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.guard.gate import Cleared, Limits, clear, shut

OPEN = Limits(cap=80, starts_ms=1000, ends_ms=2000, frozen=False)
FROZEN = Limits(cap=80, starts_ms=1000, ends_ms=2000, frozen=True)
ENDLESS = Limits(cap=80, starts_ms=1000, ends_ms=None, frozen=False)

amounts = some.integers(-5, 200)


@pytest.mark.parametrize(
    ("limits", "wall_ms", "reason"),
    [
        (OPEN, 999, "out_of_flight"),
        (OPEN, 1000, None),
        (OPEN, 1999, None),
        (OPEN, 2000, "out_of_flight"),
        (ENDLESS, 10**15, None),
        (FROZEN, 1500, "frozen"),
        (FROZEN, 2000, "frozen"),  # The first reason that applies is the one that is said.
    ],
)
def test_when_a_line_item_bids(limits: Limits, wall_ms: int, reason: str | None) -> None:
    """From the first moment of its flight to before the last, unless somebody froze it."""
    assert shut(limits, wall_ms) == reason


@pytest.mark.parametrize(
    ("price", "floor", "in_hand", "outcome"),
    [
        (50, 0, 100, Cleared(50, "value")),
        (80, 0, 100, Cleared(80, "value")),  # At the cap it is still the value that sets it.
        (81, 0, 100, Cleared(80, "cap")),
        (50, 50, 100, Cleared(50, "value")),  # A bid at the floor can win.
        (50, 51, 100, "under_floor"),
        (90, 80, 100, Cleared(80, "cap")),
        (90, 81, 100, "under_floor"),
        (0, 0, 100, "price_rounds_to_zero"),
        (-1, 0, 100, "price_rounds_to_zero"),
        (0, 10, 100, "price_rounds_to_zero"),
        (50, 0, 50, Cleared(50, "value")),
        (50, 0, 49, Cleared(49, "money_in_hand")),
        (90, 0, 49, Cleared(49, "money_in_hand")),
        (50, 49, 49, Cleared(49, "money_in_hand")),
        (50, 50, 49, "budget_held"),
        (50, 0, 0, "budget_held"),
        (50, 60, 0, "under_floor"),
    ],
)
def test_what_becomes_of_a_price(
    price: int, floor: int, in_hand: int, outcome: Cleared | str
) -> None:
    """Cap, then zero, then floor, then the money in hand; each says that it was the one."""
    assert clear(price, "value", OPEN, floor, in_hand) == outcome


@given(amounts, amounts, some.integers(0, 200))
def test_no_price_leaves_that_should_not(price: int, floor: int, in_hand: int) -> None:
    """What leaves is positive, within cap, hand and proposal, and not under the floor."""
    outcome = clear(price, "value", OPEN, floor, in_hand)
    if isinstance(outcome, Cleared):
        assert max(1, floor) <= outcome.price <= min(price, OPEN.cap, in_hand)
        assert (outcome.set_by == "value") == (outcome.price == price)
