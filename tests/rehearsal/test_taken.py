"""What a policy did, in columns: one number per auction, in order, with nothing made up."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.rehearsal.player import Auction
from service.rehearsal.taken import PASSED, Taken

MONEY = ("least", "value", "worth", "bid", "paid")
FLAGS = ("won", "unknown", "valued", "told")


def test_nothing_played_is_empty_columns() -> None:
    """Of the right kinds all the same, so that sums over them are 0."""
    columns = Taken().columns
    assert {getattr(columns, name).size for name in MONEY + FLAGS} == {0}
    assert {getattr(columns, name).dtype for name in MONEY} == {np.dtype(np.int64)}
    assert {getattr(columns, name).dtype for name in FLAGS} == {np.dtype(np.bool_)}


def test_one_auction_stands_in_every_column() -> None:
    """Each number in its own column, which a swap of two would show."""
    taken = Taken()
    taken.add(Auction(1, 20, 30, 40), 50, 60, True, False)
    columns = taken.columns
    assert [getattr(columns, name).tolist() for name in MONEY] == [[20], [30], [40], [50], [60]]
    assert [getattr(columns, name).tolist() for name in FLAGS] == [[True], [False], [True], [True]]


@pytest.mark.parametrize(
    ("value", "number", "valued"), [(None, 0, False), (0, 0, True), (7, 7, True)]
)
def test_an_unknown_value_is_not_a_value_of_nothing(
    value: int | None, number: int, valued: bool
) -> None:
    """Both count as 0 in sums, and only the flag tells them apart."""
    taken = Taken()
    taken.add(Auction(1, 20, value, 0), PASSED, 0, False, False)
    columns = taken.columns
    assert (columns.value[0], columns.valued[0]) == (number, valued)


@pytest.mark.parametrize(
    ("most_lost", "least_won", "told"), [(None, None, True), (5, None, False), (None, 5, False)]
)
def test_a_bounded_price_is_not_told(
    most_lost: int | None, least_won: int | None, told: bool
) -> None:
    """Either limit in place of the price says that the price itself is unknown."""
    taken = Taken()
    auction = Auction(1, 20, 1, 1, most_lost=most_lost, least_won=least_won)
    taken.add(auction, 10, 0, False, True)
    assert taken.columns.told.tolist() == [told]


def test_untold_outcomes_are_counted_with_their_cost() -> None:
    """A loss that nobody told costs nothing and is counted all the same."""
    taken = Taken()
    for paid in (None, 5, 0, 7):
        taken.never_told(paid)
    assert (taken.untold, taken.untold_paid) == (4, 12)
    assert taken.columns.bid.size == 0


@given(rows=some.lists(some.tuples(some.integers(0, 2**62), some.integers(-1, 2**62)), max_size=8))
def test_columns_keep_order_and_whole_nanos(rows: list[tuple[int, int]]) -> None:
    """Up to 2^62 nanos nothing is rounded, and a column read twice grows no longer."""
    taken = Taken()
    for least, bid in rows:
        taken.add(Auction(0, least, None, 0), bid, 0, False, False)
    first, again = taken.columns, taken.columns
    assert list(zip(first.least.tolist(), first.bid.tolist(), strict=True)) == rows
    assert np.array_equal(first.least, again.least)


def test_columns_that_were_read_do_not_change() -> None:
    """They are copies: what is played later does not move under a reader's hands."""
    taken = Taken()
    taken.add(Auction(0, 1, None, 0), 2, 0, False, False)
    before = taken.columns
    taken.add(Auction(0, 3, None, 0), 4, 0, False, False)
    assert before.least.tolist() == [1]
    assert taken.columns.least.tolist() == [1, 3]
