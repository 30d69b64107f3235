"""The queue of the decision log: oldest first, bounded, and what it loses it counts."""

from __future__ import annotations

from collections import deque
from typing import Any

from hypothesis import given
from hypothesis import strategies as st

from service.backlog import Backlog

ROOM = 5


def decisions(*numbers: int) -> list[dict[str, Any]]:
    """Decisions that can be told apart."""
    return [{"number": number} for number in numbers]


def filled(*numbers: int) -> Backlog:
    """A backlog with these decisions in it, as far as there is room."""
    backlog = Backlog(ROOM)
    for decision in decisions(*numbers):
        backlog.add(decision)
    return backlog


def test_the_oldest_come_out_first() -> None:
    """In pieces no larger than asked for, until nothing is left."""
    backlog = filled(1, 2, 3)
    assert backlog.drain(2) == decisions(1, 2)
    assert backlog.drain(2) == decisions(3)
    assert backlog.drain(2) == []


def test_without_room_the_new_is_dropped_and_counted() -> None:
    """A price never waits for its log, and the log says what it lacks."""
    backlog = filled(1, 2, 3, 4, 5, 6, 7)
    assert backlog.dropped == 2
    assert backlog.drain(ROOM) == decisions(1, 2, 3, 4, 5)
    backlog.add({"number": 8})
    assert (backlog.drain(ROOM), backlog.dropped) == (decisions(8), 2)


def test_what_is_put_back_comes_first_again() -> None:
    """A write that failed changes nothing of the order."""
    backlog = filled(1, 2, 3)
    failed = backlog.drain(2)
    backlog.add({"number": 4})
    backlog.put_back(failed)
    assert backlog.drain(ROOM) == decisions(1, 2, 3, 4)


def test_what_is_put_back_without_room_loses_its_oldest() -> None:
    """The newest that fit are kept, and the rest is counted."""
    backlog = filled(1, 2, 3)
    failed = backlog.drain(3)
    for decision in decisions(4, 5, 6):
        backlog.add(decision)
    backlog.put_back(failed)
    assert (backlog.drain(ROOM), backlog.dropped) == (decisions(2, 3, 4, 5, 6), 1)
    full = filled(1, 2, 3, 4, 5)
    full.put_back(decisions(0))
    assert (full.drain(ROOM), full.dropped) == (decisions(1, 2, 3, 4, 5), 1)


STEPS = st.lists(st.tuples(st.sampled_from(["add", "log", "fail"]), st.integers(1, 4)), max_size=60)


@given(STEPS)
def test_every_decision_is_logged_once_or_counted(steps: list[tuple[str, int]]) -> None:
    """Whatever fails in between: the log is in order, without repeats, and the count is right."""
    backlog, logged, made = Backlog(ROOM), deque[int](), 0
    for what, count in steps:
        if what == "add":
            for number in range(made, made + count):
                backlog.add({"number": number})
            made += count
            continue
        taken = backlog.drain(count)
        if what == "log":
            logged.extend(decision["number"] for decision in taken)
        else:
            backlog.put_back(taken)
    logged.extend(decision["number"] for decision in backlog.drain(ROOM))
    assert list(logged) == sorted(set(logged))
    assert len(logged) + backlog.dropped == made
