"""The fold adds what each kind of entry teaches, and nothing else."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.fold import fold
from service.learner.tally import Tally

CEILING = 50_000
Entry = tuple[str, dict[str, Any]]

amounts = some.integers(0, 3 * CEILING)
flags = some.integers(0, 1)
bodies = {
    "won": some.fixed_dictionaries(
        {"price": some.integers(0, 9_000), "bid": amounts, "round": flags, "late": some.booleans()}
    ),
    "lost": some.fixed_dictionaries({"bid": amounts, "to_win": some.none(), "round": flags}),
    "void": some.fixed_dictionaries({"round": flags}),
    "value": some.fixed_dictionaries({"amount": amounts, "was": some.none() | amounts}),
    "matured": some.fixed_dictionaries(
        {"wins": some.integers(4, 9), "amounts": some.lists(amounts, max_size=4)}
    ),
    "tick": some.fixed_dictionaries({"rounds": amounts, "under_floor": amounts}),
    "retire": some.fixed_dictionaries({"rounds": amounts, "under_floor": amounts}),
    "lease": some.just({"amount": 3}),
}
entries = some.lists(
    some.one_of(*(some.tuples(some.just(kind), body) for kind, body in bodies.items())), max_size=30
)
arrivals = some.sampled_from(["once", "accrues"])


def folded(rows: Sequence[Entry], arrival: str = "once", start: Tally | None = None) -> Tally:
    """Fold rows onto a tally under the ceiling of these tests."""
    return fold(start or Tally.fresh(), rows, CEILING, arrival)


@given(entries, arrivals, some.randoms(use_true_random=False))
def test_the_order_does_not_matter(rows: list[Entry], arrival: str, chance: Any) -> None:
    """Any order of the same entries gives the same bytes."""
    other = list(rows)
    chance.shuffle(other)

    assert folded(other, arrival).to_bytes() == folded(rows, arrival).to_bytes()


@given(entries, entries, arrivals)
def test_parts_add_up_to_the_whole(one: list[Entry], two: list[Entry], arrival: str) -> None:
    """Folding on, and merging two folds, both equal one fold over everything."""
    whole = folded([*one, *two], arrival)

    assert folded(two, arrival, start=folded(one, arrival)) == whole
    assert folded(one, arrival).merge(folded(two, arrival)) == whole


@given(entries, entries, arrivals)
def test_a_reset_forgets_what_came_before(one: list[Entry], two: list[Entry], arrival: str) -> None:
    """Only what follows the last reset counts."""
    assert folded([*one, ("reset", {}), *two], arrival) == folded(two, arrival)


def test_a_won_auction_is_a_win_at_its_price() -> None:
    """Wins, prices paid and rounds add up; a round counted by a tick is not counted again."""
    rows: list[Entry] = [
        ("won", {"price": 900, "bid": 1000, "source": "s", "round": 1, "late": False}),
        ("won", {"price": 700, "bid": 1000, "source": "s", "round": 0, "late": True}),
    ]

    assert folded(rows) == Tally(rounds=1, wins=2, late=1, paid=1600)


def test_losses_voids_and_ticks_are_rounds() -> None:
    """A loss and a void are rounds, and so are passes under the floor."""
    rows: list[Entry] = [
        ("lost", {"bid": 5, "to_win": 6, "source": "s", "round": 1}),
        ("void", {"round": 1}),
        ("tick", {"rounds": 10, "under_floor": 4}),
        ("retire", {"rounds": 2, "under_floor": 0}),
    ]

    assert folded(rows) == Tally(rounds=18, under_floor=4, losses=1, voids=1)


@pytest.mark.parametrize(
    ("rows", "learnt"),
    [
        ([("value", {"amount": 0, "was": None})], Tally(known=1, values_seen=1)),
        (
            [("value", {"amount": 7, "was": None})],
            Tally(known=1, converted=1, amount=7, amount_square=49, values_seen=1),
        ),
        (
            [("value", {"amount": CEILING + 1, "was": None})],
            Tally(
                known=1,
                converted=1,
                amount=CEILING,
                amount_square=CEILING**2,
                clipped=1,
                values_seen=1,
            ),
        ),
        (
            [
                ("value", {"amount": 0, "was": CEILING + 1}),
                ("value", {"amount": CEILING + 1, "was": None}),
            ],
            Tally(known=1, values_seen=1),
        ),
        ([("matured", {"wins": 3, "amounts": [7]})], Tally()),
    ],
)
def test_once_a_value_makes_its_win_known(rows: list[Entry], learnt: Tally) -> None:
    """Nothing is a known value too, and a correction replaces without making another win known."""
    assert folded(rows, "once") == learnt


def test_accruing_values_count_when_their_window_closes() -> None:
    """Reports are only seen; closed windows teach wins with and without a value."""
    rows: list[Entry] = [
        ("value", {"amount": 7, "was": None}),
        ("value", {"amount": 9, "was": 7}),
        ("matured", {"wins": 3, "amounts": [9, 2 * CEILING]}),
    ]

    assert folded(rows, "accrues") == Tally(
        known=3,
        converted=2,
        amount=9 + CEILING,
        amount_square=81 + CEILING**2,
        clipped=1,
        values_seen=1,
    )


def test_another_ceiling_refolds_the_same_raw_entries() -> None:
    """Raw amounts stay in the stream, so a raised ceiling teaches what was cut."""
    rows: list[Entry] = [("value", {"amount": 3 * CEILING, "was": None})]

    assert fold(Tally(), rows, CEILING, "once").amount == CEILING
    assert fold(Tally(), rows, 10 * CEILING, "once").amount == 3 * CEILING
