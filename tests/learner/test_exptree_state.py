"""A tree survives its bytes, stays small, and refuses bytes that are not its own."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.exptree_rules import DOUBLINGS_MAX, Rules
from service.learner.exptree_state import Tree, UnreadableTree
from service.learner.partition import CELLS_FITTING, Ticks
from tests.learner.exptree_games import SCALE, rules, visited

RULES = rules(100, win_only=True)
COUNTS = some.integers(0, 2**62)
STEPS = some.dictionaries(some.integers(1, 99), some.integers(-(2**120), 2**120))
TREES = some.builds(
    lambda steps, counts, stage, lessons: Tree(
        counts[0], stage, tuple(sorted(steps.items())), max(lessons), min(lessons), *counts[1:]
    ),
    STEPS,
    some.tuples(COUNTS, COUNTS, COUNTS),
    some.tuples(some.integers(0, DOUBLINGS_MAX), some.integers(0, DOUBLINGS_MAX)),
    some.tuples(COUNTS, COUNTS),
)
TAUGHT = Tree(rounds=7, stage=(3, 2), steps=((8, 5), (11, -(2**50))), lessons=4, counted=2)


@given(TREES)
def test_a_tree_survives_its_bytes(tree: Tree) -> None:
    """What is written is read back equal, and written again byte for byte."""
    state = tree.to_bytes(RULES)

    assert Tree.from_bytes(state, RULES) == tree
    assert Tree.from_bytes(state, RULES).to_bytes(RULES) == state
    assert len(state) == 85 + 18 * len(tree.steps)


@pytest.mark.parametrize("win_only", [False, True])
def test_a_state_with_every_tick_visited_is_under_64_kib(win_only: bool) -> None:
    """With the most cells that fitting ticks can give."""
    of = Rules(Ticks.fitting(2 * CELLS_FITTING), SCALE, win_only)
    tree = visited(of)

    assert len(tree.steps) == CELLS_FITTING - 1 == of.ticks.cells - 1
    assert len(tree.to_bytes(of)) < 64 * 1024


@pytest.mark.parametrize(
    "other",
    [
        rules(101, win_only=True),
        rules(100, win_only=False),
        rules(100, win_only=True, rate=0.5),
        Rules(Ticks(SCALE, SCALE // 100), SCALE + 1, win_only=True),
        Rules(Ticks(SCALE + 1, SCALE // 100), SCALE, win_only=True),
    ],
)
def test_a_tree_of_other_rules_is_refused(other: Rules) -> None:
    """Other ticks, cap, ceiling, rate or variant: its weights would mean something else."""
    with pytest.raises(UnreadableTree, match="other rules"):
        Tree.from_bytes(TAUGHT.to_bytes(other), RULES)


def test_any_damaged_byte_is_noticed() -> None:
    """Each byte changed, and each shorter and one longer state, is refused."""
    state = TAUGHT.to_bytes(RULES)
    spoilt = [state[:at] + bytes([state[at] ^ 0x10]) + state[at + 1 :] for at in range(len(state))]
    for wrong in (*spoilt, *(state[:end] for end in range(len(state))), state + b"\0"):
        with pytest.raises(UnreadableTree):
            Tree.from_bytes(wrong, RULES)


@pytest.mark.parametrize(
    "wrong",
    [
        replace(TAUGHT, stage=(DOUBLINGS_MAX + 1, 0)),
        replace(TAUGHT, steps=((11, 1), (8, 1))),
        replace(TAUGHT, steps=((8, 1), (8, 1))),
        replace(TAUGHT, steps=((0, 1),)),
        replace(TAUGHT, steps=((100, 1),)),
        replace(TAUGHT, counted=5),
    ],
)
def test_whole_bytes_that_are_no_tree_are_refused(wrong: Tree) -> None:
    """Cuts out of order or out of range, more counted than taught, a stage never reached."""
    with pytest.raises(UnreadableTree):
        Tree.from_bytes(wrong.to_bytes(RULES), RULES)


@pytest.mark.parametrize("state", [b"", b"{}", b"\xff" * 200, b'{"form":1,"rounds":0}'])
def test_foreign_bytes_are_refused(state: bytes) -> None:
    """The tally of another method never becomes a tree."""
    with pytest.raises(UnreadableTree):
        Tree.from_bytes(state, RULES)


def test_the_form_of_another_release_is_refused() -> None:
    """The form is the fourth byte, and is looked at before anything else."""
    state = TAUGHT.to_bytes(RULES)

    with pytest.raises(UnreadableTree, match="form"):
        Tree.from_bytes(state[:3] + b"\x02" + state[4:], RULES)
