"""Hints in the fold: they count with their value, or by age while it may still come."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.fold import Lesson, fold
from service.learner.hint_part import CELLS_MAX, Book, learn
from service.learner.hints import Hints
from service.learner.memory import Memory, UnreadableMemory
from service.learner.rules import ONCE, Rules

CEILING = 1000
WINDOW_MS = 6400  # Cells of 100.
OF_ONCE = Rules(CEILING, ONCE, WINDOW_MS, hints=True)
ACCRUING = Rules(CEILING, "accrues", WINDOW_MS, hints=True)
SILENT = Rules(CEILING, "accrues", WINDOW_MS, hints=True, silence_ms=500)


def won(at_ms: int, hint: int | None = 7) -> Lesson:
    """A win, with a hint unless it is None."""
    return Lesson("won", {"price": 5, "round": 1} | ({} if hint is None else {"hint": hint}), at_ms)


def valued(at_ms: int, amount: int, won_ms: int = 0, hint: int = 7, **more: Any) -> Lesson:
    """A value of such a win."""
    body = {"amount": amount, "was": None, "won_ms": won_ms, "total_was": 0, "hint": hint}
    return Lesson("value", body | more, at_ms)


def test_of_values_that_come_once_a_hint_counts_with_its_value() -> None:
    """A win without a value is unknown; values are cut at the ceiling, corrections replace."""
    lessons = [won(1), won(2, 40), won(3, None), valued(9, 2000, hint=40)]
    book = Book.from_bytes(learn(b"", lessons, OF_ONCE))
    assert (book.closed, book.cells) == (Hints(1, 40, CEILING, CEILING**2), ())
    corrected = [*lessons, valued(10, 30, hint=40, was=2000, total_was=2000)]
    assert Book.from_bytes(learn(b"", corrected, OF_ONCE)).closed == Hints(1, 40, 30, 900)


def test_of_values_that_accrue_a_hint_counts_by_its_age() -> None:
    """Half of what is open by a share of half; all of it once the window is over."""
    lessons = [won(0), won(50), won(250, 100), valued(300, 20)]
    book = Book.from_bytes(learn(b"", lessons, ACCRUING))
    assert [cell.start_ms for cell in book.cells] == [0, 200]
    assert book.counted([0.5, 0.1]) == Hints(3, 7 + 10, 20, 400)
    over = Book.from_bytes(learn(b"", [*lessons, Lesson("tick", {}, 100 + WINDOW_MS)], ACCRUING))
    assert over.closed == Hints(2, 14, 20, 400)
    assert over.counted([0.5]) == Hints(3, 14 + 50, 20, 400)


def test_windows_wait_for_a_silent_source_and_stay_few() -> None:
    """Nothing closes while no values come, and what piles up is kept in few cells."""
    lessons = [valued(0, 0), *(won(at) for at in range(1, 40_000, 100))]
    book = Book.from_bytes(learn(b"", lessons, SILENT))
    assert book.closed.impressions == 0
    assert len(book.cells) == CELLS_MAX
    assert book.counted([1.0] * CELLS_MAX).hinted == 400 * 7


def test_a_reset_and_what_was_won_before_it_teach_nothing() -> None:
    """After it the part is fresh, and values of earlier wins pass by."""
    lessons = [won(1), valued(2, 20), Lesson("reset", {}, 3)]
    assert learn(b"", lessons, ACCRUING) == b""
    assert learn(b"", [*lessons, valued(4, 9, before_reset=True)], ACCRUING) == b""


rows = some.one_of(
    some.builds(won, some.just(0), some.none() | some.integers(0, 99)),
    some.builds(valued, some.just(0), some.integers(0, 2 * CEILING), some.integers(0, 9000)),
    some.just(Lesson("tick", {"rounds": 1, "under_floor": 0})),
)


@pytest.mark.parametrize("rules", [OF_ONCE, ACCRUING, SILENT])
@given(
    history=some.lists(some.tuples(some.integers(0, 2500), some.lists(rows)), max_size=8),
    cut=some.integers(0, 30),
    chance=some.randoms(use_true_random=False),
)
def test_order_within_a_moment_and_cuts_move_nothing(
    rules: Rules, history: list[tuple[int, list[Lesson]]], cut: int, chance: Any
) -> None:
    """The same lessons in pieces, and those of one moment in any order, leave the same bytes."""
    told, shuffled, at_ms = list[Lesson](), list[Lesson](), 0
    for later_ms, some_rows in history:
        at_ms += later_ms
        moment = [Lesson(row.kind, row.body, at_ms) for row in some_rows]
        told += moment
        shuffled += chance.sample(moment, len(moment))
    whole = fold(Memory.fresh(), told, rules).to_bytes()
    first = fold(Memory.fresh(), shuffled[:cut], rules).to_bytes()

    assert fold(Memory.from_bytes(first), shuffled[cut:], rules).to_bytes() == whole


@pytest.mark.parametrize("state", [b"hnt", b"\0" * 200])
def test_other_bytes_are_refused(state: bytes) -> None:
    """A state of another form is never misread."""
    with pytest.raises(UnreadableMemory):
        Book.from_bytes(state)
