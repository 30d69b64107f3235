"""Ticks cut the range of bids whole, and a price lies where counting bids one by one says."""

from __future__ import annotations

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.partition import CELLS_FITTING, BadTicks, Ticks, narrowest

SMALL = some.integers(2, 9).flatmap(
    lambda tick: some.builds(Ticks, some.integers(tick, 60), some.just(tick))
)


@given(SMALL)
def test_the_cells_join_without_gap_up_to_the_top(ticks: Ticks) -> None:
    """Each cell begins where the one below ends, the first at 0, and the last ends at the top."""
    edges = [ticks.edges(cell) for cell in range(ticks.cells)]

    assert edges[0][0] == 0
    assert edges[-1][1] == ticks.top
    assert all(left[1] == right[0] for left, right in pairwise(edges))
    assert all(ticks.tick <= end - start < 2 * ticks.tick for start, end in edges)


@given(SMALL, some.data())
def test_a_price_lies_where_counting_says(ticks: Ticks, data: some.DataObject) -> None:
    """The bids of the cell above the price are counted one by one, and so are all of them."""
    price = data.draw(some.integers(0, ticks.top - 1))
    cell, above, bids = ticks.place(price)
    start, end = ticks.edges(cell)

    assert start <= price < end
    assert above == sum(bid > price for bid in range(start + 1, end))
    assert bids == len(range(start + 1, end)) > 0


@given(SMALL, some.data())
def test_cuts_part_bids_that_beat_a_price_from_those_that_do_not(
    ticks: Ticks, data: some.DataObject
) -> None:
    """Only bids of the cell between two cuts are ever unlike; on a tick none are."""
    price = data.draw(some.integers(0, ticks.top - 1))
    ends = [0, *ticks.cuts(price), ticks.cells]
    unlike = 0
    for left, right in pairwise(ends):
        bids = [b for c in range(left, right) for b in range(*ticks.edges(c)) if b % ticks.tick]
        beats = {bid > price for bid in bids}
        assert len(beats) < 2 or right - left == 1
        unlike += len(beats) == 2
    assert unlike <= (price % ticks.tick > 0 or price >= (ticks.cells - 1) * ticks.tick)


@pytest.mark.parametrize(
    ("price", "cuts"),
    [(0, ()), (1, (1,)), (10, (1,)), (11, (1, 2)), (89, (8,)), (90, (8,)), (80, (8,))],
)
def test_the_ends_of_the_range_are_never_cuts(price: int, cuts: tuple[int, ...]) -> None:
    """Nine cells of ten nanos, the last of 15: the price is a tick, or between two."""
    assert Ticks(95, 10).cuts(price) == cuts


@pytest.mark.parametrize(
    ("top", "tick", "cells"),
    [
        (2, 2, 1),
        (4096, 2, 2048),
        (4098, 5, 819),
        (10**9, 500_000, 2000),
        (10**15, 500_000_000_000, 2000),
    ],
)
def test_fitting_ticks_are_the_finest_round_ones(top: int, tick: int, cells: int) -> None:
    """1, 2 or 5 times a power of ten, at least 2, and at most 2,048 cells."""
    ticks = Ticks.fitting(top)

    assert (ticks.tick, ticks.cells) == (tick, cells)
    assert ticks.cells <= CELLS_FITTING


@pytest.mark.parametrize(
    ("top", "tick"), [(100, 1), (100, 0), (100, -5), (9, 10), (-100, 2), (2**17, 2)]
)
def test_ticks_without_room_for_bids_are_refused(top: int, tick: int) -> None:
    """No bid lies between such ticks, or a tick would not fit two bytes."""
    with pytest.raises(BadTicks):
        Ticks(top, tick)


@pytest.mark.parametrize("top", [-1, 0, 1])
def test_a_cap_without_a_bid_below_it_is_refused(top: int) -> None:
    """No ticks fit a cap below 2 nanos."""
    with pytest.raises(BadTicks):
        Ticks.fitting(top)


@pytest.mark.parametrize(("cuts", "width"), [((), 20), ((8,), 8), ((8, 11), 3), ((3, 19), 1)])
def test_the_narrowest_interval_is_measured_in_cells(cuts: tuple[int, ...], width: int) -> None:
    """The ends of the range count as cuts."""
    assert narrowest(cuts, 20) == width
