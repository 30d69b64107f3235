"""Lessons that no bid of ours can have given are refused before they move anything."""

from __future__ import annotations

import math
from typing import Any

import pytest

from service.learner.exptree import learn
from service.learner.exptree_lessons import (
    CHANCE_MIN,
    ROUNDS_MAX,
    BadLesson,
    Lesson,
    Lost,
    Passed,
    Won,
    Worth,
)
from service.learner.exptree_rules import DOUBLINGS_MAX, FIRST
from service.learner.exptree_state import Tree
from tests.learner.exptree_games import SCALE, rules

# What strict types would stop, but a stream read back as JSON might hold.
ANY: Any = {"half": 0.5, "nan": math.nan, "yes": True, "list": [0, 0], "one": (0,)}


@pytest.mark.parametrize(
    "lesson",
    [
        *(Won(5, chance, FIRST) for chance in (math.nan, math.inf, -math.inf, -0.1, 1.0000001)),
        *(Worth(5, chance, FIRST, 1) for chance in (math.nan, math.inf, -0.1, 2.0)),
        *(Won(price, 0.5, FIRST) for price in (-1, ANY["half"], ANY["nan"], ANY["yes"])),
        *(Lost(price, FIRST) for price in (-1, ANY["half"], ANY["nan"])),
        *(Worth(5, 0.5, FIRST, amount) for amount in (-1, ANY["half"], ANY["nan"])),
        Worth(5, 0.5, FIRST, 1, was=-1),
        Worth(-5, 0.5, FIRST, 1),
        *(Won(5, 0.5, FIRST, rounds) for rounds in (-1, ANY["half"], ROUNDS_MAX + 1)),
        *(Lost(5, stage) for stage in ((-1, 0), (0, DOUBLINGS_MAX + 1), ANY["list"], ANY["one"])),
        *(Passed(rounds) for rounds in (-1, ANY["nan"], ROUNDS_MAX + 1)),
    ],
    ids=repr,
)
@pytest.mark.parametrize("win_only", [False, True])
def test_what_cannot_be_is_refused(win_only: bool, lesson: Lesson) -> None:
    """Not finite, out of range, or not whole; the tree given stays as it was."""
    of, tree = rules(20, win_only), Tree(rounds=3, steps=((4, 7),))

    with pytest.raises(BadLesson):
        learn(tree, [Passed(1), lesson], of)
    assert tree == Tree(rounds=3, steps=((4, 7),))


@pytest.mark.parametrize(
    "lesson",
    [
        Won(0, 0.0, FIRST),
        Won(SCALE - 2, 5e-324, FIRST),
        Worth(SCALE - 2, 5e-324, FIRST, SCALE),
        Won(SCALE - 2, CHANCE_MIN, FIRST),
        Worth(SCALE - 2, CHANCE_MIN, FIRST, SCALE),
        Won(10**30, 1.0, (DOUBLINGS_MAX, 6)),
        Lost(None, None),
        Passed(ROUNDS_MAX),
    ],
    ids=repr,
)
def test_what_lies_on_the_edge_is_taken(lesson: Lesson) -> None:
    """The largest and smallest of what can be leave a tree that still has its bytes."""
    of = rules(20, win_only=False)
    tree = learn(Tree.fresh(), [lesson], of)

    assert Tree.from_bytes(tree.to_bytes(of), of) == tree
