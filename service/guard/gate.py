"""May this price leave? The checks before a price and the clamps after it, in their order."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

from service.guard.fees import NONE, Fees


@dataclass(frozen=True, slots=True)
class Limits:
    """What binds every price of one line item; money in nanos and gross, times in wall clock ms."""

    cap: int
    starts_ms: int
    ends_ms: int | None
    frozen: bool
    fees: Fees = NONE


class Cleared(NamedTuple):
    """A price that may leave, in nanos per impression, and what set it."""

    price: int
    set_by: str


def shut(limits: Limits, wall_ms: int) -> str | None:
    """Why this line item bids for nobody now, or None."""
    # First of all: whoever froze it at night must see that word and no other.
    if limits.frozen:
        return "frozen"
    begun = limits.starts_ms <= wall_ms
    if not begun or (limits.ends_ms is not None and wall_ms >= limits.ends_ms):
        return "out_of_flight"
    return None


def clear(price: int, set_by: str, limits: Limits, floor: int, in_hand: int) -> Cleared | str:
    """
    Clamp a proposed price to the cap and the money in hand, or name why it passes.

    Args:
        price: Proposed price in nanos per impression, rounded down.
        floor: The least price that can win, in nanos; equal is enough.
        in_hand: What the slice in hand still holds, in nanos.
    """
    if price > limits.cap:
        price, set_by = limits.cap, "cap"
    # Before the floor, since a floor of nothing must not let a bid of nothing out.
    if price <= 0:
        return "price_rounds_to_zero"
    if price < floor:
        return "under_floor"
    # Last, since only here does the money decide and not the impression.
    if price > in_hand:
        price, set_by = in_hand, "money_in_hand"
    if price <= 0 or price < floor:
        return "budget_held"
    return Cleared(price, set_by)
