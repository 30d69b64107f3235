"""The sums of both arms by hand: corrections, cuts, clocks, resets, and what comes too late."""

from __future__ import annotations

import itertools
import json
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.learner.arm_part import (
    AMOUNT,
    BOUGHT,
    CELLS,
    CONTROL,
    CONVERTED,
    FORM,
    MAIN,
    PAID,
    SUMS,
    Arms,
    UnreadableArms,
    learn,
    read,
    wanted,
)
from service.learner.lesson import Lesson
from service.learner.memory import UnreadableMemory
from service.learner.parts import PARTS
from service.learner.rules import ACCRUES, ONCE, Rules

WINDOW_MS = 32 * 100
ONCE_RULES = Rules(1000, arrival=ONCE, window_ms=WINDOW_MS, control=True)
ACCRUING = Rules(1000, arrival=ACCRUES, window_ms=WINDOW_MS, control=True)
FLAT = {"method": "flat", "price": 7, "share": 10**8}
BEGIN = Lesson("create", {"control": FLAT}, 0)


def won(at_ms: int, price: int = 5, arm: str = "", **more: Any) -> Lesson:
    """A win of an arm."""
    return Lesson("won", {"price": price, "bid": price, "arm": arm, "round": 1, **more}, at_ms)


def value(at_ms: int, amount: int, was: int | None = None, **more: Any) -> Lesson:
    """A value of a win at 100 ms."""
    body = {"amount": amount, "was": was, "won_ms": 100, **more}
    return Lesson("value", body, at_ms)


def sums(*lessons: Lesson, rules: Rules = ONCE_RULES, arm: str = MAIN) -> list[int]:
    """All sums of an arm after the first entry and these."""
    arms = read(learn(b"", [BEGIN, *lessons], rules))
    return [arms.all_of(arm, which) for which in range(len(SUMS))]


@pytest.mark.parametrize(
    ("lessons", "found"),
    [
        ([], [0, 0, 0, 0]),
        ([won(100)], [1, 5, 0, 0]),
        ([won(100, bid=3)], [1, 3, 0, 0]),
        ([won(100, only="market")], [0, 0, 0, 0]),
        ([won(100, only="value")], [1, 5, 0, 0]),
        ([won(100), won(200, 9)], [2, 14, 0, 0]),
        ([value(100, 0)], [0, 0, 0, 0]),
        ([value(100, 300)], [0, 0, 1, 300]),
        ([value(100, 1000)], [0, 0, 1, 1000]),
        ([value(100, 1001)], [0, 0, 1, 1000]),
        ([value(100, 300), value(200, 0, 300)], [0, 0, 0, 0]),
        ([value(100, 300), value(200, 50, 300)], [0, 0, 1, 50]),
        ([value(100, 2000), value(200, 1500, 2000)], [0, 0, 1, 1000]),
        ([value(100, 300, before_reset=True)], [0, 0, 0, 0]),
        ([Lesson("lost", {"round": 1}, 5), Lesson("tick", {"rounds": 3}, 6)], [0, 0, 0, 0]),
    ],
)
def test_where_a_value_comes_once_its_last_word_counts(
    lessons: list[Lesson], found: list[int]
) -> None:
    """Bought, paid, converted, amount: the price at most the bid, a value at most the ceiling."""
    assert sums(*lessons) == found


@pytest.mark.parametrize(
    ("lessons", "found"),
    [
        ([value(100, 300, total_was=0)], [0, 0, 1, 300]),
        ([value(100, 300, total_was=0), value(200, 200, total_was=300)], [0, 0, 1, 500]),
        ([value(100, 900, total_was=0), value(200, 900, total_was=900)], [0, 0, 1, 1000]),
        ([value(100, 300, total_was=0), value(200, 0, 300, total_was=300)], [0, 0, 0, 0]),
        (
            [
                value(100, 300, total_was=0),
                value(200, 200, total_was=300),
                value(300, 50, 300, total_was=500),
            ],
            [0, 0, 1, 250],
        ),
    ],
)
def test_where_values_accrue_their_sum_is_cut_and_not_each(
    lessons: list[Lesson], found: list[int]
) -> None:
    """One impression converts once, however many events it brings."""
    assert sums(*lessons, rules=ACCRUING) == found


def test_arms_are_kept_apart() -> None:
    """An entry without an arm is the method's own."""
    lessons = [won(100), won(100, 7, CONTROL), Lesson("won", {"price": 2, "round": 1}, 150)]
    assert sums(*lessons) == [2, 7, 0, 0]
    assert sums(*lessons, arm=CONTROL) == [1, 7, 0, 0]
    assert sums(*lessons, arm="other") == [0, 0, 0, 0]


def test_what_is_billed_is_counted_by_the_bill() -> None:
    """Where an impression is paid for when it is billed, a win alone buys nothing."""
    rules = Rules(1000, window_ms=WINDOW_MS, paid_by="billed", control=True)
    bill = Lesson("billed", {"price": 4, "arm": ""}, 200)
    assert sums(won(100), rules=rules) == [0, 0, 0, 0]
    assert sums(won(100), bill, rules=rules) == [1, 4, 0, 0]


def test_a_cell_closes_when_its_last_moment_had_the_window() -> None:
    """A win at 199 is in the second cell, which closes at 3,200 after its end at 200."""
    for at_ms, ripe in ((3399, 0), (3400, 1), (10_000, 1)):
        arms = read(learn(b"", [BEGIN, won(199), Lesson("tick", {"rounds": 1}, at_ms)], ONCE_RULES))
        assert arms.ripe.get(MAIN, [0])[BOUGHT] == ripe
        assert arms.all_of(MAIN, BOUGHT) == 1
    assert arms.cell_ms == WINDOW_MS // CELLS


def test_what_comes_after_its_window_is_left_out_in_both_arms() -> None:
    """A value of a win whose cell has closed would be counted in one arm by chance."""
    late = value(5000, 300)
    assert sums(won(100), Lesson("tick", {"rounds": 1}, 3400), late) == [1, 5, 0, 0]


def test_a_clock_that_stands_or_goes_back_moves_nothing() -> None:
    """Entries never go back, and a state must not if one did."""
    state = learn(b"", [BEGIN, won(5000)], ONCE_RULES)
    back = read(learn(state, [Lesson("tick", {"rounds": 1}, 10)], ONCE_RULES))
    assert (back.clock_ms, back.closed) == (5000, 18)


def test_another_plain_rule_begins_afresh_and_the_same_goes_on() -> None:
    """Its share is no part of the rule; what it bids and by which method are."""
    same = Lesson("edit", {"control": {**FLAT, "share": 1}}, 300)
    dearer = Lesson("edit", {"control": {**FLAT, "price": 8}}, 300)
    older = Lesson("edit", {"budget": 5}, 300)
    assert sums(won(100), same) == sums(won(100), older) == [1, 5, 0, 0]
    assert sums(won(100), dearer) == [0, 0, 0, 0]


def test_without_a_rule_there_are_no_bytes() -> None:
    """Before one is known, and after it was taken away."""
    assert learn(b"", [won(100)], ONCE_RULES) == b""
    gone = Lesson("edit", {"control": None}, 200)
    assert learn(b"", [BEGIN, won(100), gone], ONCE_RULES) == b""


def test_a_reset_forgets_sums_and_keeps_rule_and_clock() -> None:
    """What is bought after it is compared under the same rule."""
    lessons = [BEGIN, won(5000), Lesson("reset", {}, 6000), won(6100, 9)]
    arms = read(learn(b"", lessons, ONCE_RULES))
    assert (arms.rule, arms.clock_ms) == ("flat 7", 6100)
    assert [arms.all_of(MAIN, which) for which in (BOUGHT, PAID)] == [1, 9]


@given(
    some.lists(some.tuples(some.integers(0, 3000), some.integers(0, 9)), max_size=12), some.data()
)
@settings(max_examples=40, deadline=None)
def test_lessons_in_pieces_are_lessons_at_once(
    wins: list[tuple[int, int]], data: some.DataObject
) -> None:
    """Wherever a batch ends, the bytes are the same; and within a window so is any order."""
    lessons = [BEGIN, *(won(at_ms, price) for at_ms, price in sorted(wins))]
    cut = data.draw(some.integers(0, len(lessons)))
    whole = learn(b"", lessons, ONCE_RULES)
    assert learn(learn(b"", lessons[:cut], ONCE_RULES), lessons[cut:], ONCE_RULES) == whole
    assert sums(*lessons[1:])[:2] == [len(wins), sum(price for _, price in wins)]


def test_the_order_of_values_within_a_cell_leaves_the_same_bytes() -> None:
    """Six orders of three entries of one moment."""
    three = [won(100), won(100, 7, CONTROL), value(100, 40)]
    states = {learn(b"", [BEGIN, *order], ONCE_RULES) for order in itertools.permutations(three)}
    assert len(states) == 1


@pytest.mark.parametrize(
    "state",
    [
        *(b"{", b"[]", b"7", b"null", b"\xff", b"{}"),
        json.dumps({"form": FORM + 1}).encode(),
        json.dumps({"form": FORM, "cells": []}).encode(),
        json.dumps({"form": FORM, "cells": {}, "numbers": [1, 2]}).encode(),
        json.dumps({"form": FORM, "cells": {"": [[]]}, "numbers": [1, 2, 3]}).encode(),
    ],
)
def test_damaged_bytes_are_refused_as_unreadable_memory(state: bytes) -> None:
    """So that the learner is refolded from its stream and nobody guesses."""
    with pytest.raises(UnreadableArms):
        read(state)
    assert issubclass(UnreadableArms, UnreadableMemory)


def test_bytes_read_back_are_written_again_alike() -> None:
    """A round trip through JSON keeps every cell and its number."""
    state = learn(b"", [BEGIN, won(100), won(900, 3, CONTROL), value(950, 8)], ONCE_RULES)
    assert read(state).to_bytes() == state
    assert read(b"") == Arms()
    assert [AMOUNT, CONVERTED] == [SUMS.index("amount"), SUMS.index("converted")]


@pytest.mark.parametrize(
    ("name", "changes"),
    [
        ("arms", {"control": True}),
        ("hints", {"hints": True}),
        ("linear", {"dimensions": 8}),
        ("pace", {"paced": True}),
    ],
)
def test_a_part_is_kept_just_where_it_is_wanted(name: str, changes: dict[str, Any]) -> None:
    """A line item without it carries no bytes of it."""
    assert PARTS[name].wanted(Rules(1000, **changes))
    assert not PARTS[name].wanted(Rules(1000))
    assert wanted(Rules(1000, control=True)) is True
