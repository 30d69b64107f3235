"""The work of folding does not grow with what was folded, counted in calls and not in time."""

from __future__ import annotations

import sys
from collections import Counter
from types import FrameType

import pytest

from service.learner.fold import Lesson, fold
from service.learner.memory import Memory
from service.learner.rules import Drift, Rules
from service.rehearsal.lesson_stream import BATCH, LEARNERS, STEP_MS, Learner, Stream

BATCHES = 60


def calls_of(memory: Memory, lessons: list[Lesson], rules: Rules) -> int:
    """How many functions, ours and built in, one fold calls."""
    calls = 0

    def count(frame: FrameType, event: str, argument: object) -> None:
        nonlocal calls
        calls += event in ("call", "c_call")

    sys.setprofile(count)
    try:
        fold(memory, lessons, rules)
    finally:
        sys.setprofile(None)
    return calls


def grown(learner: Learner, batches: int) -> tuple[Memory, list[Lesson]]:
    """A memory after so many batches, and the next batch."""
    rules, memory = learner.rules, Memory.fresh()
    stream = Stream(rules, 7)
    for _ in range(batches):
        memory = fold(memory, stream.batch(memory), rules)
    return memory, stream.batch(memory)


@pytest.mark.parametrize("name", ["kl-ucbid", *(name for name in LEARNERS if "," in name)])
def test_a_lesson_costs_the_same_however_many_came_before(name: str) -> None:
    """
    After 30,000 impressions as after 10,000, and under four times the first batch of all,
    which still meets no cell that closes and nothing to forget.
    """
    learner = LEARNERS[name]
    first, early, late = (
        calls_of(memory, lessons, learner.rules) / len(lessons)
        for memory, lessons in (grown(learner, batches) for batches in (0, 20, BATCHES))
    )

    assert late < 1.3 * early
    assert late < 4.0 * first


@pytest.mark.parametrize("name", ["exptree", "exptree-win-only"])
def test_a_tree_costs_the_same_once_its_ticks_are_there(name: str) -> None:
    """Its calls hang on the lessons of a batch and on at most 2,048 ticks."""
    learner = LEARNERS[name]
    early, late = (
        calls_of(memory, lessons, learner.rules) / len(lessons)
        for memory, lessons in (grown(learner, batches) for batches in (10, 40))
    )

    assert late < 1.5 * early


@pytest.mark.parametrize("name", LEARNERS)
def test_a_memory_stays_small(name: str) -> None:
    """Under 64 KiB however long it learns, and hardly larger than when it was half as old."""
    learner = LEARNERS[name]
    rules, memory, sizes = learner.rules, Memory.fresh(), list[int]()
    stream = Stream(rules, 7)
    for _ in range(BATCHES):
        memory = fold(memory, stream.batch(memory), rules)
        sizes.append(len(memory.to_bytes()))

    assert max(sizes) < 65_536
    assert sizes[-1] < 1.25 * max(sizes[: BATCHES // 2])


@pytest.mark.parametrize("by", ["rounds", "time"])
def test_forgetting_looks_at_no_cell_that_is_within_the_horizon(by: str) -> None:
    """With 36 closed cells a lesson takes as many calls as with six; 64 cover the window."""
    size = {"rounds": 10_000, "time": 1_000_000}[by]
    forgets = Rules(100, window_ms=64_000, drift=Drift("window", by, size))
    costs = []
    for cells in (70, 100):
        at_ms, memory = 0, Memory.fresh()
        while len(memory.cells) < cells:
            moments = range(at_ms + STEP_MS, at_ms + 11 * STEP_MS, STEP_MS)
            ten = [Lesson("lost", {"to_win": None, "round": 1}, moment) for moment in moments]
            memory, at_ms = fold(memory, ten, forgets), moments[-1]
        lessons = [ten[0]._replace(at_ms=at_ms + step) for step in range(1, 201)]
        costs.append(calls_of(memory, lessons, forgets) - calls_of(memory, lessons[:100], forgets))

    assert costs[1] < 1.2 * costs[0]


def test_the_stream_is_what_it_says() -> None:
    """Three in ten are won, one win in ten has a value, and every lesson has its moment."""
    lessons = [lesson for batch in range(20) for lesson in Stream(Rules(100), batch).batch(_none())]
    kinds = Counter(lesson.kind for lesson in lessons)

    assert kinds["won"] + kinds["lost"] == 20 * BATCH
    assert kinds["won"] / (20 * BATCH) == pytest.approx(0.306, abs=0.02)
    assert kinds["value"] / kinds["won"] == pytest.approx(0.1, abs=0.025)
    first = lessons[: lessons.index(lessons[-1])]
    assert all(lesson.at_ms % STEP_MS == 0 for lesson in first)


def _none() -> Memory:
    return Memory.fresh()
