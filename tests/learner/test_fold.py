"""The fold adds what each kind of entry teaches, and nothing else."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.fold import Lesson, fold
from service.learner.memory import Memory, Prior
from service.learner.rules import ACCRUES, ONCE, Drift, Rules
from service.learner.tally import Tally

CEILING = 50_000
WINDOW_MS = 6400
OF_ONCE = Rules(CEILING, ONCE, WINDOW_MS)
ACCRUING = Rules(CEILING, ACCRUES, WINDOW_MS)

amounts = some.integers(0, 3 * CEILING)
flags = some.integers(0, 1)
moments = some.integers(0, 3 * WINDOW_MS)
bodies = {
    "won": some.fixed_dictionaries(
        {"price": some.integers(0, 9_000), "bid": amounts, "round": flags, "late": some.booleans()}
    ),
    "lost": some.fixed_dictionaries({"bid": amounts, "to_win": some.none(), "round": flags}),
    "void": some.fixed_dictionaries({"round": flags}),
    "value": some.fixed_dictionaries(
        {"amount": amounts, "was": some.none() | amounts, "won_ms": moments, "total_was": amounts}
    ),
    "tick": some.fixed_dictionaries({"rounds": amounts, "under_floor": amounts}),
    "retire": some.fixed_dictionaries({"rounds": amounts, "under_floor": amounts}),
    "lease": some.just({"amount": 3}),
}
entries = some.lists(
    some.one_of(*(some.tuples(some.just(kind), body) for kind, body in bodies.items())), max_size=30
)
games = some.sampled_from(
    [
        *(OF_ONCE, ACCRUING),
        replace(ACCRUING, drift=Drift("window", "rounds", 640)),
        replace(ACCRUING, drift=Drift("discount", "time", 5000)),
        replace(OF_ONCE, drift=Drift("discount", "rounds", 1000), ratio=2.0, restarts=True),
        replace(ACCRUING, silence_ms=2000, ratio=1.5),
    ]
)
histories = some.lists(some.tuples(some.integers(0, 2000), entries), max_size=6)


def lessons(rows: Sequence[tuple[str, dict[str, Any]]], at_ms: int = 0) -> list[Lesson]:
    """The same entries as lessons of one moment."""
    return [Lesson(kind, body, at_ms) for kind, body in rows]


def told(history: Sequence[tuple[int, list[tuple[str, dict[str, Any]]]]]) -> list[Lesson]:
    """Lessons of many moments, each so many milliseconds after the one before."""
    at_ms, found = 0, list[Lesson]()
    for later_ms, rows in history:
        at_ms += later_ms
        found += lessons(rows, at_ms)
    return found


def folded(rows: Sequence[Lesson], rules: Rules = OF_ONCE, start: Memory | None = None) -> Memory:
    """Fold lessons onto a memory."""
    return fold(start or Memory.fresh(), rows, rules)


@given(histories, entries, games, some.randoms(use_true_random=False))
def test_the_order_within_a_moment_does_not_matter(
    history: Any, rows: Any, rules: Rules, chance: Any
) -> None:
    """Any order of the entries of one moment gives the same bytes, whatever came before."""
    start = folded(told(history), rules)
    other = list(rows)
    chance.shuffle(other)
    one, two = (folded(lessons(r, start.clock_ms + 1), rules, start) for r in (rows, other))

    assert one.to_bytes() == two.to_bytes()


@given(histories, some.integers(0, 200), games)
def test_a_fold_from_zero_equals_checkpoint_and_tail(history: Any, cut: int, rules: Rules) -> None:
    """However a stream is cut, the bytes are the same, also when a part went through bytes."""
    rows = told(history)
    checkpoint = folded(rows[:cut], rules).to_bytes()
    tail = folded(rows[cut:], rules, Memory.from_bytes(checkpoint))

    assert tail.to_bytes() == folded(rows, rules).to_bytes()


@given(histories, histories, games)
def test_a_reset_forgets_what_came_before(one: Any, two: Any, rules: Rules) -> None:
    """Only what follows the last reset counts; the clock and the guess stay."""
    before, after = told(one), told(two)
    reset = Lesson("reset", {}, before[-1].at_ms if before else 0)
    moved = [lesson._replace(at_ms=lesson.at_ms + reset.at_ms) for lesson in after]
    began = Memory(clock_ms=reset.at_ms, began_ms=folded(before, rules).began_ms)

    assert folded([*before, reset, *moved], rules) == folded(moved, rules, began)


@given(histories, games)
def test_memory_does_not_grow_with_lessons(history: Any, rules: Rules) -> None:
    """The same lessons fifty times over take no more cells than spans there are."""
    rows, memory = told(history), Memory.fresh()
    for turn in range(50):
        later_ms = turn * 20_000
        moved = [lesson._replace(at_ms=lesson.at_ms + later_ms) for lesson in rows]
        memory = folded(moved, rules, memory)

    assert len(memory.cells) <= 64 + 1 + 2 * 64


def test_a_won_auction_is_a_win_at_its_price() -> None:
    """Wins, prices paid and rounds add up; a round counted by a tick is not counted again."""
    rows: list[tuple[str, dict[str, Any]]] = [
        ("won", {"price": 900, "bid": 1000, "source": "s", "round": 1, "late": False}),
        ("won", {"price": 700, "bid": 1000, "source": "s", "round": 0, "late": True}),
    ]

    assert folded(lessons(rows)).total == Tally(rounds=1, wins=2, late=1, paid=1600)


def test_losses_voids_and_ticks_are_rounds() -> None:
    """A loss and a void are rounds, and so are passes under the floor."""
    rows: list[tuple[str, dict[str, Any]]] = [
        ("lost", {"bid": 5, "to_win": 6, "source": "s", "round": 1}),
        ("void", {"round": 1}),
        ("tick", {"rounds": 10, "under_floor": 4}),
        ("retire", {"rounds": 2, "under_floor": 0}),
    ]

    assert folded(lessons(rows)).total == Tally(rounds=18, under_floor=4, losses=1, voids=1)


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
            Tally(0, 0, 0, 0, 0, 0, 0, 1, 1, CEILING, CEILING**2, 1, 1),
        ),
        (
            [
                ("value", {"amount": 0, "was": CEILING + 1}),
                ("value", {"amount": CEILING + 1, "was": None}),
            ],
            Tally(known=1, values_seen=1),
        ),
    ],
)
def test_once_a_value_makes_its_win_known(
    rows: list[tuple[str, dict[str, Any]]], learnt: Tally
) -> None:
    """Nothing is a known value too, and a correction replaces without making another win known."""
    assert folded(lessons(rows)).total == learnt


def test_a_win_without_its_one_value_stays_unknown() -> None:
    """Under `once` no word is not a word: time alone never makes a win worthless."""
    rows = [Lesson("won", {"price": 1, "round": 1}, 0), Lesson("lease", {}, 10**9)]

    assert folded(rows).total.known == 0


def test_accruing_values_count_at_once_and_their_win_with_its_window() -> None:
    """All that one impression brought is one value, cut at the ceiling as a whole."""
    win = {"price": 1, "round": 1}
    rows = [
        *(Lesson("won", win, 10), Lesson("won", win, 10)),
        Lesson("value", {"amount": 7, "was": None, "won_ms": 10, "total_was": 0}, 20),
        Lesson("value", {"amount": CEILING, "was": None, "won_ms": 10, "total_was": 7}, 30),
    ]
    open_ = folded(rows, ACCRUING).total
    over = folded([*rows, Lesson("lease", {}, 10 + WINDOW_MS + 200)], ACCRUING).total

    assert (open_.known, open_.converted, open_.amount) == (0, 1, CEILING)
    assert (over.known, over.converted, over.amount) == (2, 1, CEILING)
    assert over.amount_square == CEILING**2
    assert over.clipped == 1


def test_a_correction_stands_in_place_of_what_it_corrects() -> None:
    """Taken back to nothing, an impression has not converted after all."""
    rows = [
        Lesson("won", {"price": 1, "round": 1}, 10),
        Lesson("value", {"amount": 9, "was": None, "won_ms": 10, "total_was": 0}, 20),
        Lesson("value", {"amount": 0, "was": 9, "won_ms": 10, "total_was": 9}, 30),
    ]

    assert folded(rows, ACCRUING).total.converted == folded(rows, ACCRUING).total.amount == 0


@pytest.mark.parametrize(("delay_ms", "taught"), [(WINDOW_MS, True), (WINDOW_MS + 1, False)])
def test_what_comes_after_the_window_teaches_nothing(delay_ms: int, taught: bool) -> None:
    """To the millisecond."""
    rows = [
        Lesson("won", {"price": 1, "round": 1}, 10),
        Lesson("value", {"amount": 9, "was": None, "won_ms": 10, "total_was": 0}, 10 + delay_ms),
    ]

    assert folded(rows, ACCRUING).total.converted == taught


def test_only_bills_make_impressions_paid_where_bills_are_spend() -> None:
    """Under billing a win alone has no window that could close."""
    rules = replace(ACCRUING, paid_by="billed")
    win, bill = Lesson("won", {"price": 1, "round": 1}), Lesson("billed", {"price": 1, "round": 0})
    later = Lesson("lease", {}, 2 * WINDOW_MS)

    assert folded([win, later], rules).total.known == 0
    assert folded([win, bill, later], rules).total.known == 1


def test_a_silent_source_of_values_keeps_windows_open() -> None:
    """Until a value comes again, and as long again for what piled up meanwhile."""
    rules = replace(ACCRUING, silence_ms=1000)
    won = Lesson("won", {"price": 1, "round": 1}, 10)
    word = {"amount": 5, "was": None, "won_ms": 10, "total_was": 0}
    silent = [won, Lesson("lease", {}, 100_000)]
    heard = [*silent, Lesson("value", word, 100_000), Lesson("lease", {}, 100_900)]

    assert folded(silent, ACCRUING).total.known == 1
    assert folded(silent, rules).total.known == 0
    assert folded(heard, rules).total.known == 0
    assert folded(heard, rules).total.converted == 1
    assert folded([*heard, Lesson("lease", {}, 101_001)], rules).total.known == 1


def test_delays_are_timed_once_per_impression() -> None:
    """From the win to its first value; later ones and corrections say nothing of delay."""
    rows = [
        *(Lesson("won", {"price": 1, "round": 1}, 10) for _ in range(2)),
        Lesson("value", {"amount": 9, "was": None, "won_ms": 10, "total_was": 0}, 110),
        Lesson("value", {"amount": 9, "was": None, "won_ms": 10, "total_was": 9}, 210),
        Lesson(
            "value", {"amount": 9, "was": None, "won_ms": 10, "total_was": 0, "parked": True}, 10
        ),
    ]
    memory = folded(sorted(rows, key=lambda lesson: lesson.at_ms), ACCRUING)

    assert (memory.delays, memory.delay_sum_ms) == (1, 100)


def test_a_prior_lesson_replaces_the_guess_and_outlives_a_reset() -> None:
    """What kin have learnt was not learnt here, so forgetting here does not touch it."""
    prior = Lesson("prior", {"per_impression": 5, "typical": 70, "impressions": 9.5})

    assert folded([prior, Lesson("reset", {})]).prior == Prior(5, 70)


def test_another_ceiling_refolds_the_same_raw_entries() -> None:
    """Raw amounts stay in the stream, so a raised ceiling teaches what was cut."""
    rows = lessons([("value", {"amount": 3 * CEILING, "was": None})])

    assert folded(rows).total.amount == CEILING
    assert folded(rows, replace(OF_ONCE, ceiling=10 * CEILING)).total.amount == 3 * CEILING
