"""The return target as it is folded from the stream: what counts as paid and as got."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from service.learner import return_part, return_target
from service.learner.fold import fold
from service.learner.lesson import SPENT, Lesson
from service.learner.memory import Memory
from service.learner.parts import RETURN
from service.learner.return_target import Return
from service.learner.rules import Rules

TARGET = return_target.Rules(2_500_000, 2**34, 10**6)
CEILING = 100 * 10**6
RULES = Rules(CEILING, returning=TARGET)


def won(cost: int, **more: Any) -> Lesson:
    """A win that cost so much."""
    return Lesson("won", {"price": cost, "round": 1, **more}, 0, 0, cost)


def value(amount: int, was: int | None = None, **more: Any) -> Lesson:
    """A value of an impression, or a correction of one."""
    return Lesson("value", {"amount": amount, "was": was, **more})


def folded(*lessons: Lesson) -> Return:
    """The return after these lessons."""
    return return_part.read(return_part.learn(b"", lessons, RULES), TARGET)


def test_prices_count_when_paid_and_values_when_they_come() -> None:
    """Paid first, lambda leans on the target; the value lets it go again."""
    paid = folded(won(10**6))
    assert (paid.paid, paid.valued, paid.slack(TARGET)) == (10**6, 0, -(10**6))
    assert paid.multiplier > 1.0 > folded(won(10**6), value(10 * 10**6)).multiplier
    exact = folded(won(10**6), value(25 * 10**5))
    assert (exact.level, exact.slack(TARGET)) == (0, 0)


def test_values_are_cut_at_the_ceiling_and_corrections_take_off() -> None:
    """A correction counts the difference, each side of it cut."""
    assert folded(value(CEILING + 5)).valued == CEILING
    assert folded(value(CEILING + 5), value(7, CEILING + 5)).valued == 7


def test_what_is_retracted_counts_as_never_bought() -> None:
    """So does the value of a win before a reset; the market part of a win tells no price."""
    for nothing in (
        Lesson(SPENT, {}, 0, 0, 5),
        won(5, only="market"),
        value(9, before_reset=True),
        Lesson("lost", {"round": 1}),
    ):
        assert folded(nothing) == Return()
    assert folded(won(9), Lesson("reset", {}), value(9)).paid == 0


def test_the_fold_carries_it_only_where_there_is_a_target() -> None:
    """By pieces as at once; another target is not read on, and none drops it."""
    lessons = [Lesson(one.kind, {"late": False, **one.body}, 0, 0, one.cost) for one in (won(8),)]
    memory = fold(Memory.fresh(), lessons, RULES)
    assert return_part.read(memory.part(RETURN), TARGET).paid == 8
    assert fold(memory, [], RULES) == memory
    assert fold(memory, [], Rules(CEILING)).part(RETURN) == b""
    other = replace(RULES, returning=replace(TARGET, target=1))
    with pytest.raises(return_part.UnreadablePart):
        fold(memory, [], other)
