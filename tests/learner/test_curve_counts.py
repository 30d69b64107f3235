"""Counts of auctions add up in any order, stay small, and refuse bytes that are not their own."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import curve_counts
from service.learner.curve_counts import (
    ABOVE,
    BELOW,
    KEPT_WHOLE,
    LOST,
    PARTS,
    SEEN,
    WON,
    BadOutcome,
    Counts,
    Feed,
    Outcome,
    UnreadableCurve,
)
from service.learner.partition import Ticks

TICKS = Ticks(105, 10)
FEEDS: list[Feed] = ["always", "on_win", "on_loss", "never"]


def _outcome(bid: int, competing: int, feed: Feed, silent: bool) -> Outcome:
    return Outcome(bid, competing <= bid, None if silent else competing, feed)


OUTCOMES = some.lists(
    some.builds(
        _outcome,
        some.integers(0, 105),
        some.integers(0, 200),
        some.sampled_from(FEEDS),
        some.booleans(),
    )
)


@pytest.mark.parametrize(
    ("outcome", "place", "column"),
    [
        (Outcome(50, True, 41, "on_win"), 5, SEEN),
        (Outcome(50, False, None, "on_win"), 5, ABOVE),
        # In its last cell a bid of 55 sees only half: it counts as a bid of 50, won or lost.
        (Outcome(55, True, 52, "on_win"), 5, ABOVE),
        (Outcome(55, False, None, "on_win"), 5, ABOVE),
        (Outcome(55, True, 50, "on_win"), 5, SEEN),
        (Outcome(50, False, 51, "on_loss"), 6, SEEN),
        (Outcome(55, False, 58, "on_loss"), 6, BELOW),
        (Outcome(55, True, None, "on_loss"), 6, BELOW),
        (Outcome(55, False, 61, "on_loss"), 7, SEEN),
        (Outcome(55, False, 102, "always"), 10, SEEN),
        (Outcome(55, False, 106, "always"), 11, SEEN),
        (Outcome(0, True, 0, "always"), 0, SEEN),
        (Outcome(105, True, 104, "on_win"), 10, SEEN),
        (Outcome(103, False, None, "on_win"), 9, ABOVE),
        (Outcome(50, True, None, "never"), 5, WON),
        (Outcome(41, False, None, "never"), 5, LOST),
        # A source that should have told the price and did not: only won or lost is left.
        (Outcome(50, True, None, "on_win"), 5, WON),
        (Outcome(50, False, None, "on_loss"), 5, LOST),
        (Outcome(50, False, None, "always"), 5, LOST),
    ],
)
def test_what_an_outcome_tells(outcome: Outcome, place: int, column: int) -> None:
    """Each feed, on and off the ticks, at both ends, and with a price that is missing."""
    assert curve_counts.told(outcome, TICKS) == (place, column)


@given(OUTCOMES)
def test_the_order_does_not_matter(outcomes: list[Outcome]) -> None:
    """Reversed and in two parts, the bytes are the same."""
    whole = curve_counts.add(Counts(TICKS), outcomes)
    half = len(outcomes) // 2
    parts = curve_counts.add(Counts(TICKS), outcomes[half:][::-1])
    assert curve_counts.add(parts, outcomes[:half][::-1]).to_bytes() == whole.to_bytes()
    assert whole.auctions == len(outcomes)


@given(OUTCOMES, some.integers(0, KEPT_WHOLE))
def test_counts_survive_their_bytes(outcomes: list[Outcome], kept: int) -> None:
    """Also after forgetting, when they are fractions."""
    counts = curve_counts.discount(curve_counts.add(Counts(TICKS), outcomes), kept)
    assert Counts.from_bytes(counts.to_bytes(), TICKS) == counts


def test_forgetting_halves_every_count() -> None:
    """Wins and losses alike, so no win rate moves; what falls below 2^-16 is gone."""
    full = curve_counts.add(Counts(TICKS), [Outcome(50, True, None, "never")] * 3)
    half = curve_counts.discount(full, KEPT_WHOLE // 2)
    assert half.column(WON)[5] == 1.5
    assert curve_counts.discount(half, KEPT_WHOLE) == half
    assert curve_counts.discount(half, KEPT_WHOLE // (4 * PARTS)) == Counts(TICKS)
    with pytest.raises(ValueError, match="share"):
        curve_counts.discount(half, KEPT_WHOLE + 1)


def test_the_largest_state_is_under_64_kib() -> None:
    """With every tick visited and counts as large as they get."""
    ticks = Ticks(curve_counts.CELLS_MAX * 2, 2)
    most = (curve_counts.COUNT_MAX,) * 5
    counts = Counts(ticks, tuple((place, most) for place in range(ticks.cells + 2)))
    assert len(counts.to_bytes()) == 24 + 42 * 1502 < 64 * 1024
    assert Counts.from_bytes(counts.to_bytes(), ticks) == counts
    with pytest.raises(UnreadableCurve, match="cells"):
        Counts(Ticks(curve_counts.CELLS_MAX * 2 + 2, 2))


def test_a_full_count_stays_full() -> None:
    """It never becomes a number that cannot be written."""
    rows = ((5, (0, 0, 0, curve_counts.COUNT_MAX, 0)),)
    counts = curve_counts.add(Counts(TICKS, rows), [Outcome(50, True, None, "never")])
    assert counts.rows == rows


@pytest.mark.parametrize("top", [2, 999, 2_500_000, 10**12])
def test_fitting_ticks_are_at_most_a_thousand(top: int) -> None:
    """And more than two hundred wherever there is room for them."""
    cells = curve_counts.fitting(top).cells
    assert cells <= curve_counts.CELLS_FITTING
    assert cells > 200 or top < 1000
    assert curve_counts.prices(curve_counts.fitting(top))[-1] == top


def test_any_damaged_byte_is_noticed() -> None:
    """Each byte changed, each shorter state, and one longer."""
    state = curve_counts.add(Counts(TICKS), [Outcome(50, True, 41, "on_win")]).to_bytes()
    spoilt = [state[:at] + bytes([state[at] ^ 0x10]) + state[at + 1 :] for at in range(len(state))]
    for wrong in (*spoilt, *(state[:end] for end in range(len(state))), state + b"\0"):
        with pytest.raises(UnreadableCurve):
            Counts.from_bytes(wrong, TICKS)


@pytest.mark.parametrize(
    "rows",
    [
        ((6, (1, 0, 0, 0, 0)), (5, (1, 0, 0, 0, 0))),
        ((12, (1, 0, 0, 0, 0)),),
        ((5, (0, 0, 0, 0, 0)),),
        ((5, (2, -1, 0, 0, 0)),),
    ],
)
def test_whole_bytes_that_are_no_counts_are_refused(
    rows: tuple[tuple[int, tuple[int, int, int, int, int]], ...],
) -> None:
    """Out of order, past the end, empty, below nought."""
    with pytest.raises(UnreadableCurve):
        Counts.from_bytes(Counts(TICKS, rows).to_bytes(), TICKS)


def test_counts_on_other_ticks_are_refused() -> None:
    """Their places would mean other prices."""
    for other in (Ticks(105, 5), Ticks(106, 10)):
        with pytest.raises(UnreadableCurve, match="other ticks"):
            Counts.from_bytes(Counts(other).to_bytes(), TICKS)


@pytest.mark.parametrize(
    "outcome",
    [
        Outcome(-1, False, None, "never"),
        Outcome(106, False, None, "never"),
        Outcome(50, True, 51, "on_win"),
        Outcome(50, False, 50, "on_loss"),
        Outcome(50, True, -1, "always"),
    ],
)
def test_an_impossible_outcome_is_refused(outcome: Outcome) -> None:
    """A bid off the range, or a win against a higher bid."""
    with pytest.raises(BadOutcome):
        curve_counts.add(Counts(TICKS), [outcome])


def test_columns_are_counts_in_auctions() -> None:
    """One number for each place and one for what is beyond the top."""
    counts = curve_counts.add(Counts(TICKS), [Outcome(50, True, 41, "on_win")] * 2)
    assert counts.column(SEEN).tolist() == [0, 0, 0, 0, 0, 2, 0, 0, 0, 0, 0, 0]
    assert not counts.column(BELOW).any()
