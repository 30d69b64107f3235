"""From entries to lessons of a tree: what each kind says, and what an outcome must carry."""

from __future__ import annotations

from typing import Any

import pytest

from service.learner import exptree
from service.learner.exptree_lessons import Lesson, Lost, Passed, Won, Worth
from service.learner.exptree_state import Tree
from service.learner.fold import Lesson as Entry
from service.learner.fold import fold
from service.learner.growing import earlier_lesson, law_of, tree_lesson, value_lesson, weight
from service.learner.memory import Memory
from service.learner.rules import Rules, tree_rules
from tests.decision.invented import CAP, config

WIN = {"price": 900, "chance": 0.25, "stage": [1, 2], "round": 1}


@pytest.mark.parametrize(
    ("kind", "body", "lesson"),
    [
        ("won", WIN, Won(900, 0.25, (1, 2), 1)),
        ("won", {"price": 900, "round": 0}, Won(900, None, None, 0)),
        ("lost", {"to_win": 950, "stage": [0, 0], "round": 1}, Lost(950, (0, 0), 1)),
        ("lost", {"to_win": None, "round": 1}, Lost(None, None, 1)),
        ("void", {"round": 1}, Passed(1)),
        ("tick", {"rounds": 12, "under_floor": 7}, Passed(12)),
        ("retire", {"rounds": 3, "under_floor": 0}, Passed(3)),
        ("lease", {"amount": 3}, None),
        ("billed", {"price": 900, "round": 0}, None),
    ],
)
def test_what_each_entry_tells_a_tree(
    kind: str, body: dict[str, Any], lesson: Lesson | None
) -> None:
    """Passes under the floor are no rounds of the law, and bills teach nothing more."""
    assert tree_lesson(kind, body) == lesson


def test_a_value_is_a_lesson_only_with_its_win_beside_it() -> None:
    """A correction stands in place of what it corrects."""
    value = {"amount": 7, "was": 9, "win": WIN}

    assert value_lesson(value, 9, 7) == Worth(900, 0.25, (1, 2), 7, 9)
    assert value_lesson({"amount": 7, "was": None}, 0, 7) is None
    assert value_lesson({**value, "win": {"price": 900, "stage": [0, 0]}}, 0, 7) is None


def test_what_came_before_its_win_was_told_is_taught_with_it() -> None:
    """A bill and values on it may come first, when nobody knows by what law it was won."""
    assert earlier_lesson("won", {**WIN, "brought": 5}) == Worth(900, 0.25, (1, 2), 5)
    assert earlier_lesson("won", WIN) is None
    assert earlier_lesson("won", {"price": 9, "brought": 5, "round": 1}) is None


def test_a_win_carries_the_chance_of_its_law_and_a_loss_its_stage() -> None:
    """Under the first law all prices are alike, so the chance is the share of bids above."""
    rules = tree_rules(config("exptree"))
    assert rules is not None
    law = law_of(b"", rules).to_bytes()
    said = weight(law, "won", CAP // 4, 0, win_only=False)

    assert said["chance"] == pytest.approx(0.75, abs=0.01)
    assert weight(law, "lost", CAP // 4, 0, win_only=False) == {"stage": said["stage"]}
    assert weight(law, "won", None, 0, win_only=False) == {"stage": said["stage"]}


def test_a_floor_conditions_the_law_as_published_only() -> None:
    """Bids under the floor are no rounds there; of wins alone they are losses like any other."""
    rules = tree_rules(config("exptree"))
    assert rules is not None
    law, price, floor = law_of(b"", rules).to_bytes(), 3 * CAP // 4, CAP // 2
    published, of_wins = (weight(law, "won", price, floor, one)["chance"] for one in (False, True))

    assert published == pytest.approx(2 * of_wins, rel=0.01)
    assert of_wins == pytest.approx(0.25, abs=0.01)


def test_a_fold_grows_the_tree_it_would_grow_alone() -> None:
    """Entries in, the bytes of the same lessons out; a reset goes back to no tree."""
    base = config("exptree")
    rules, game = Rules.from_config(base), tree_rules(base)
    assert game is not None
    stage = list(law_of(b"", game).stage)
    win = {"price": 900_001, "chance": 0.5, "stage": stage, "round": 1, "late": False}
    value = {"amount": 10**7, "was": None, "won_ms": 5, "total_was": 0, "win": win}
    entries = [Entry("won", win, 5), Entry("value", value, 6), Entry("tick", _tick(4), 7)]
    memory = fold(Memory.fresh(), entries, rules)
    lessons: list[Lesson] = [Won(900_001, 0.5, (stage[0], stage[1])), Passed(4)]
    worth = Worth(900_001, 0.5, (stage[0], stage[1]), 10**7)
    alone = exptree.learn(Tree.fresh(), [lessons[0], worth, lessons[1]], game)

    assert memory.tree == alone.to_bytes(game)
    assert fold(memory, [Entry("reset", {}, 8)], rules).tree == b""


def _tick(rounds: int) -> dict[str, int]:
    return {"rounds": rounds, "under_floor": 3}
