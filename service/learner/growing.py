"""From an entry of the stream to a lesson of the tree, apart from what the tree makes of it.

What a randomised bid was likely to beat is written beside its outcome when that is booked,
from the law of its epoch; here it is only read.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache
from typing import Any

from service.learner import exptree
from service.learner.exptree_law import Law
from service.learner.exptree_lessons import Lesson, Lost, Passed, Won, Worth
from service.learner.exptree_rules import Rules, Stage
from service.learner.exptree_state import Tree

Body = Mapping[str, Any]


def tree_lesson(kind: str, body: Body) -> Lesson | None:
    """The lesson an entry holds for a tree, but for values; None when it holds none."""
    if "only" in body:  # Price and value are one lesson here; half of it would mislead.
        return None
    if body.get("arm") and kind in (
        "won",
        "lost",
        "void",
    ):  # Not drawn from the law, so nothing of it can be weighed by the law.
        return Passed(body["round"])
    if kind == "won":
        return Won(body["price"], body.get("chance"), _stage(body), body["round"])
    if kind == "lost":
        return Lost(body["to_win"], _stage(body), body["round"])
    if kind == "void":
        return Passed(body["round"])
    if kind in ("tick", "retire"):
        # Passes under the floor are no rounds here: the law is that of the bids that left.
        return Passed(body["rounds"])
    return None


def value_lesson(body: Body, before: int, after: int) -> Lesson | None:
    """The lesson of a value, when its win was bid by a law; amounts in nanos."""
    win = body.get("win")
    if win is None or not win.get("chance"):
        return None
    return Worth(win["price"], win["chance"], _stage(win), after, before)


def earlier_lesson(kind: str, body: Body) -> Lesson | None:
    """The lesson of what a bid had brought before its win was told, as bills may come first."""
    if kind != "won" or not body.get("chance") or not body.get("brought"):
        return None
    return Worth(body["price"], body["chance"], _stage(body), body["brought"])


def grow(state: bytes, lessons: list[Lesson], rules: Rules) -> bytes:
    """Add lessons to the bytes of a tree; no bytes are the tree before the first lesson."""
    return exptree.learn(tree_of(state, rules), lessons, rules).to_bytes(rules)


def tree_of(state: bytes, rules: Rules) -> Tree:
    """
    The tree of these bytes.

    Raises:
        UnreadableTree: Not written by this release under these rules.
    """
    return Tree.from_bytes(state, rules) if state else Tree.fresh()


def law_of(state: bytes, rules: Rules) -> Law:
    """The law that bids are drawn from on these bytes."""
    return exptree.law(tree_of(state, rules), rules)


def weight(law: bytes, kind: str, price: int | None, floor: int, win_only: bool) -> dict[str, Any]:
    """
    What an outcome must carry for the tree: the chance of beating its price, and the stage.

    As published the law is that of the bids that reach the floor, since the others are no
    rounds. Of wins alone it is the whole law: what passed under the floor is then a loss,
    which teaches nothing, and the estimate stays unbiased.

    Args:
        law: Bytes of the law of the bid's epoch.
        kind: "won" or "lost".
        price: Competing bid in nanos.
        floor: Least price the seller took, in nanos.
        win_only: Whether nothing is learnt from a loss.
    """
    drawn = _read(law)
    said: dict[str, Any] = {"stage": list(drawn.stage)}
    if kind == "won" and price is not None:
        said["chance"] = drawn.chance_above(price, 0 if win_only else floor)
    return said


@lru_cache(maxsize=64)
def _read(law: bytes) -> Law:
    """The law of these bytes; outcomes come by the hundred for each, and it has many steps."""
    return Law.from_bytes(law)


def _stage(body: Body) -> Stage | None:
    stage = body.get("stage")
    return None if stage is None else (stage[0], stage[1])
