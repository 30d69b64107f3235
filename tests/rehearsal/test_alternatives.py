"""Other ways to have bid, one row at a time: between which prices the bid would have lain."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.rehearsal.alternatives import SAYS, Alternative, Kind
from service.rehearsal.auction_log import SHUT, Logged

KINDS: tuple[Kind, ...] = ("as_it_was", "flat", "cap", "floor", "method")
CAP = 100


def row(bid: int = 50, result: str = "lost", auction: str = "second", **said: Any) -> Logged:
    """One opportunity of a line item whose cap is 100."""
    return Logged(auction, bid, result, 80, **said)


def passed(reason: str, **said: Any) -> Logged:
    """A pass."""
    return row(0, "passed", reason=reason, **said)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("reason", sorted(SHUT))
def test_a_shut_line_item_bids_nothing_in_any_way(kind: Kind, reason: str) -> None:
    """Frozen or out of flight, no price of any kind would have left."""
    assert Alternative(kind, 70, CAP).bids(passed(reason)) == (0, 0)


@pytest.mark.parametrize("kind", KINDS)
def test_each_way_says_what_it_is(kind: Kind) -> None:
    """In words that people read beside the figures."""
    assert len(SAYS[kind]) > 10
    assert len(set(SAYS.values())) == len(SAYS)


@pytest.mark.parametrize(
    ("kind", "price", "what", "bids"),
    [
        ("as_it_was", 0, row(50), (50, 50)),
        ("as_it_was", 0, passed("under_floor"), (0, 0)),
        ("flat", 70, row(50), (70, 70)),
        ("flat", 70, passed("under_floor"), (70, 70)),
        ("flat", 70, passed("no_value"), (70, 70)),
        ("flat", 70, passed("budget_spent"), (0, 70)),
        ("flat", 70, passed("budget_held"), (0, 70)),
        ("flat", 70, passed("outbid_inside"), (0, 70)),
        ("method", 0, row(50), (0, CAP)),
        ("method", 0, passed("no_value"), (0, CAP)),
        # A bid below the other cap stays as it was; above it, it is cut there.
        ("cap", 60, row(50), (50, 50)),
        ("cap", 40, row(50), (40, 40)),
        ("cap", 40, row(50, auction="first"), (0, 40)),
        # One that the cap held back may go up to a higher one.
        ("cap", 150, row(100, set_by="cap"), (100, 150)),
        ("cap", 150, row(100, set_by="value"), (100, 100)),
        ("cap", 150, passed("under_floor", floor=120), (0, 150)),
        ("cap", 110, passed("under_floor", floor=120), (0, 0)),
        ("cap", 60, passed("under_floor", floor=55), (0, 0)),
        ("cap", 60, passed("budget_spent"), (0, 60)),
        ("cap", 150, passed("outbid_inside"), (0, 150)),
        ("cap", 60, passed("outbid_inside"), (0, 0)),
        ("floor", 10, row(50), (50, 50)),
        ("floor", 10, passed("under_floor", floor=30), (0, 29)),
        ("floor", 40, passed("under_floor", floor=30), (0, 0)),
        ("floor", 10, passed("day_spent"), (0, CAP)),
    ],
)
def test_what_would_have_been_bid(
    kind: Kind, price: int, what: Logged, bids: tuple[int, int]
) -> None:
    """By hand, for each kind and each reason that its bid hangs on."""
    assert Alternative(kind, price, CAP).bids(what) == bids


@pytest.mark.parametrize("kind", [kind for kind in KINDS if kind != "floor"])
def test_only_another_floor_changes_what_is_for_sale(kind: Kind) -> None:
    """All other alternatives see the very same opportunity."""
    what = row(50, "won", price=30, floor=10)
    assert Alternative(kind, 20, CAP).seen(what) is what


def test_a_fixed_price_has_no_floor_to_change() -> None:
    """It is asked and taken or left."""
    what = row(50, "won", "fixed", price=30, floor=30)
    assert Alternative("floor", 5, CAP).seen(what) is what


@pytest.mark.parametrize(
    ("price", "floor", "other", "pays"),
    [
        (30, 10, 40, (40, 40)),  # Raised above the rival: the floor is paid.
        (30, 10, 20, (30, 30)),  # Raised below the rival: nothing changes.
        (30, 30, 10, (10, 30)),  # The floor was paid: how far rivals stayed below is unknown.
        (30, 30, 40, (40, 40)),
    ],
)
def test_a_win_under_another_floor(
    price: int, floor: int, other: int, pays: tuple[int, int]
) -> None:
    """What it costs by hand; the bid that won still does."""
    seen = Alternative("floor", other, CAP).seen(row(50, "won", price=price, floor=floor))
    assert seen.floor == other
    assert seen.pays(50, 50) == pays
    assert seen.wins_from <= 50


def test_another_floor_leaves_a_loss_lost() -> None:
    """Only the floor differs; what was told of rivals stands."""
    what = row(50, least=70, floor=10)
    seen = Alternative("floor", 20, CAP).seen(what)
    assert (seen.floor, seen.least, seen.loses_to) == (20, 70, 69)


@given(
    kind=some.sampled_from(KINDS),
    price=some.integers(1, CAP),
    bid=some.integers(0, CAP),
    reason=some.sampled_from(["", "under_floor", "budget_spent", "no_value", "outbid_inside"]),
    set_by=some.sampled_from(["value", "cap", "allowance"]),
    auction=some.sampled_from(["second", "first"]),
)
def test_the_least_bid_is_never_above_the_most(
    kind: Kind, price: int, bid: int, reason: str, set_by: str, auction: str
) -> None:
    """A range of bids is a range, within the caps of both worlds."""
    bidding = row(bid, "lost", auction, set_by=set_by)
    what = passed(reason, auction=auction) if reason else bidding
    low, high = Alternative(kind, price, CAP).bids(what)
    assert 0 <= low <= high <= CAP
