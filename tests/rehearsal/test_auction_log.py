"""Two prices hold all that was told of an auction: from one every bid wins, to the other none."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.rehearsal.auction_log import MONEY, NEVER, SHUT, Logged

TOP = 100  # Of values.


def won(auction: str = "second", bid: int = 50, price: int = 30, **said: Any) -> Logged:
    """A win of which the value is known."""
    return Logged(auction, bid, "won", 60, 60, price=price, **said)


def lost(auction: str = "second", bid: int = 50, **said: Any) -> Logged:
    """A loss."""
    return Logged(auction, bid, "lost", TOP, **said)


@pytest.mark.parametrize(
    ("row", "wins_from", "loses_to"),
    [
        # In second price a win tells the rival's bid; a tie with it counts as lost.
        (won(), 31, 30),
        (won(price=50), 50, 49),
        (won(price=0), 0, -1),
        # At the floor nobody else bid, and the floor itself is enough.
        (won(price=30, floor=30), 30, 29),
        (won(price=30, floor=20), 31, 30),
        (won(least=10), 10, 9),
        (won(least=70), 50, 49),
        # In first price it tells only that the bid was enough.
        (won("first", price=50), 50, -1),
        (won("first", price=50, floor=20), 50, 19),
        (won("first", price=50, least=33), 33, 32),
        (won("fixed", price=30, floor=30), 30, 29),
        (lost(), NEVER, 50),
        (lost(least=70), 70, 69),
        (lost(least=40), 40, 50),
        (lost("fixed", floor=30), NEVER, NEVER),
        (Logged("second", 50, "void", TOP), NEVER, NEVER),
        (Logged("second", 50, "silent", TOP, floor=20), NEVER, 19),
        (Logged("second", 0, "passed", TOP, floor=20), NEVER, 19),
        (Logged("second", 0, "passed", TOP), NEVER, -1),
    ],
)
def test_what_was_told_in_two_prices(row: Logged, wins_from: int, loses_to: int) -> None:
    """Worked out by hand for every kind of auction and outcome."""
    assert (row.wins_from, row.loses_to) == (wins_from, loses_to)


@pytest.mark.parametrize(
    ("row", "bids", "pays"),
    [
        (won(), (80, 90), (30, 30)),
        (won(price_low=10), (80, 90), (10, 30)),
        (lost(), (80, 90), (50, 90)),
        (lost(least=70), (80, 90), (70, 70)),
        (lost(floor=60), (80, 90), (60, 90)),
        (won("first", price=50), (20, 40), (20, 40)),
        (lost("first"), (40, 90), (51, 90)),
        (won("fixed", price=30, floor=30), (80, 90), (30, 30)),
        (lost("fixed", floor=35), (80, 90), (35, 35)),
        (Logged("second", 0, "passed", TOP, floor=20), (80, 90), (20, 90)),
    ],
)
def test_what_a_win_would_cost(row: Logged, bids: tuple[int, int], pays: tuple[int, int]) -> None:
    """The least and the most, by hand."""
    assert row.pays(*bids) == pays


@pytest.mark.parametrize("reason", sorted(SHUT))
def test_what_no_price_would_have_changed_does_not_count(reason: str) -> None:
    """The line item was shut, whatever it would have bid."""
    assert not Logged("second", 0, "passed", TOP, reason=reason).counts


@pytest.mark.parametrize("reason", [*sorted(MONEY), "", "under_floor", "no_value"])
def test_what_another_price_may_change_counts(reason: str) -> None:
    """Money ends sooner or later with other prices, so these are auctions."""
    assert Logged("second", 0, "passed", TOP, reason=reason).counts


@pytest.mark.parametrize(
    ("row", "opened"),
    [(won(), False), (Logged("second", 5, "won", TOP, 3), True), (lost(), False)],
)
def test_only_a_win_may_still_bring_something(row: Logged, opened: bool) -> None:
    """A loss of unknown value is not on its way to any."""
    assert row.open is opened


amounts = some.integers(0, 60)


@given(rival=amounts, floor=amounts, bid=amounts, told=some.booleans())
def test_no_truth_lies_outside_the_two_prices(rival: int, floor: int, bid: int, told: bool) -> None:
    """In second price with a rival's bid and a floor: all bids said to win or lose for sure do."""
    # A tie with a rival is lost; one who bid the floor itself cannot be told from nobody.
    least = floor if rival <= floor else rival + 1
    won_it = bid >= least
    said: dict[str, Any] = {"floor": floor, "least": least if told else None}
    price = max(rival, floor)
    row = won("second", bid, price, **said) if won_it else lost("second", bid, **said)
    # Bids up to the one are sure to lose, and those from the other on are sure to win.
    assert row.loses_to < max(least, 0 if won_it else bid + 1)
    assert row.wins_from >= least
    assert row.loses_to < row.wins_from
