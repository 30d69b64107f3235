"""A law draws as it says, tells exact chances, and refuses bytes that are not its own."""

from __future__ import annotations

import math
import struct
import zlib
from collections import Counter
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from scipy import stats

from service.learner.exptree import law
from service.learner.exptree_bounds import UNITS
from service.learner.exptree_law import Law, UnreadableLaw
from service.learner.exptree_state import Tree
from service.learner.partition import CELLS_FITTING, Ticks
from tests.learner.exptree_games import SCALE, nanos, rules

# Four cells of ten nanos and one of 15, the cap bid apart: 1·2 + 3·2 + 7 + 5 = 20 units.
SMALL = Law(Ticks(55, 10), (3, 1), forced=5, ends=(2, 4, 5), masses=(1, 3, 7))


def exact(bid: int) -> Fraction:
    """The chance of one bid of the small law, by its definition."""
    if bid == 55:
        return Fraction(5, 20)
    if bid >= 40:
        return Fraction(7, 20 * 14) if bid > 40 else Fraction(0)
    return Fraction((1, 1, 3, 3)[bid // 10], 20 * 9) if bid % 10 else Fraction(0)


@given(price=some.integers(0, 60), floor=some.integers(0, 60))
def test_chances_are_sums_over_single_bids(price: int, floor: int) -> None:
    """Above a price, of all bids that reach a floor: rounded once from the exact fraction."""
    left = sum(exact(bid) for bid in range(floor, 56))
    above = sum(exact(bid) for bid in range(max(price + 1, floor), 56))

    assert SMALL.chance_above(price, floor) == (float(above / left) if left else 0.0)


def test_the_chance_of_one_bid_is_that_of_its_draw() -> None:
    """Every nano from outside the range through it; all of them together are certain."""
    found = [SMALL.chance_of(bid) for bid in range(-3, 60)]
    drawn = [float(exact(bid)) if 0 < bid <= 55 else 0.0 for bid in range(-3, 60)]
    assert found == pytest.approx(drawn)
    assert sum(found) == pytest.approx(1.0)


def test_all_bids_are_above_nothing_and_none_above_the_top() -> None:
    """The ends of the range, and prices outside it."""
    assert SMALL.total == 20
    assert SMALL.chance_above(-5) == SMALL.chance_above(0) == 1.0
    assert SMALL.chance_above(54) == 0.25
    assert SMALL.chance_above(55) == SMALL.chance_above(10**30) == 0.0


def test_bids_are_drawn_with_their_chances() -> None:
    """A chi-square test over all 51 bids, 50,000 seeded draws; none is a tick."""
    rng, draws = np.random.default_rng(11), 50_000
    seen = Counter(SMALL.draw(rng) for _ in range(draws))
    bids = [bid for bid in range(1, 56) if exact(bid)]
    assert set(seen) == set(bids)

    expected = [float(exact(bid)) * draws for bid in bids]
    assert stats.chisquare([seen[bid] for bid in bids], expected).pvalue > 0.001


@pytest.mark.parametrize(
    ("order", "bid"),
    [(0.0, 10), (0.04, 10), (0.05, 20), (0.1, 30), (0.39, 40), (0.4, 55), (0.75, 55), (1.0, 55)],
)
def test_quantiles_end_their_cells(order: float, bid: int) -> None:
    """Up to one tick: the cell in which the share of bids is reached, by its upper edge."""
    assert SMALL.quantile(order) == bid


def test_the_quantile_of_a_learnt_law_is_near_its_chances() -> None:
    """The share of bids above the quantile and below its cell encloses what was asked for."""
    now = law(Tree(steps=((300, UNITS), (700, -3 * UNITS))), rules(1000, win_only=True, rate=0.1))
    for order in (0.1, 0.5, 0.9):
        edge = now.quantile(order)
        under = 1.0 - now.chance_above(edge) if edge < SCALE else 1.0
        before = 1.0 - now.chance_above(edge - nanos(0.001))
        assert before <= order <= under or edge == SCALE


def test_a_law_survives_its_bytes() -> None:
    """Read back equal, with the same draws; 10 bytes a run and 36 more."""
    learnt = law(Tree(rounds=9, stage=(4, 2), steps=((3, 5 * UNITS),)), rules(20, win_only=True))
    for now in (SMALL, learnt):
        again = Law.from_bytes(now.to_bytes())
        assert again == now
        assert again.to_bytes() == now.to_bytes()
        assert len(now.to_bytes()) == 36 + 10 * len(now.ends)
        one, two = (kind.draw(np.random.default_rng(5)) for kind in (now, again))
        assert one == two


def test_a_law_with_every_tick_visited_is_under_64_kib() -> None:
    """With the most cells that fitting ticks can give, each of its own mass."""
    ends = tuple(range(1, CELLS_FITTING + 1))
    now = Law(Ticks.fitting(2 * CELLS_FITTING), (0, 0), 0, ends, ends)

    assert len(now.to_bytes()) < 64 * 1024


def test_any_damaged_byte_is_noticed() -> None:
    """Each byte changed, and each shorter and one longer state, is refused."""
    state = SMALL.to_bytes()
    spoilt = [state[:at] + bytes([state[at] ^ 0x10]) + state[at + 1 :] for at in range(len(state))]
    for wrong in (b"", *spoilt, *(state[:end] for end in range(len(state))), state + b"\0"):
        with pytest.raises(UnreadableLaw):
            Law.from_bytes(wrong)


@pytest.mark.parametrize(
    ("place", "form", "number"),
    [
        (3, ">B", 2),  # Another form.
        (4, ">Q", 9),  # A top below its tick.
        (12, ">Q", 1),  # A tick without room for a bid.
        (20, ">B", 63),  # A stage never reached.
        (30, ">H", 2),  # A run less than there are.
        (32, ">H", 4),  # Runs that do not rise.
        (52, ">H", 4),  # Runs that end before the top.
        (34, ">Q", 0),  # A cell without mass.
        (34, ">Q", 2**62),  # More mass than one.
    ],
)
def test_whole_bytes_that_are_no_law_are_refused(place: int, form: str, number: int) -> None:
    """Signed anew, so that only what they say is wrong."""
    body = bytearray(SMALL.to_bytes()[:-4])
    struct.pack_into(form, body, place, number)

    with pytest.raises(UnreadableLaw):
        Law.from_bytes(bytes(body) + struct.pack(">I", zlib.crc32(body)))


@pytest.mark.parametrize("order", [math.nan, math.inf])
def test_no_quantile_is_given_for_what_is_no_order(order: float) -> None:
    """It fails instead of naming a bid."""
    with pytest.raises((ValueError, OverflowError)):
        SMALL.quantile(order)
