"""Bytes in, bytes out: what the store asks of a learner, which is bytes to it; pure."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from service.errors import PoisonLesson
from service.learner.exptree_state import UnreadableTree
from service.learner.fold import Lesson, fold
from service.learner.growing import law_of, weight
from service.learner.memory import Memory, UnreadableMemory
from service.learner.rules import TREES, Rules, tree_rules

FRESH = Memory.fresh().to_bytes()  # The state of a learner before its first lesson.


# What a damaged entry may raise; anything else is a fault of ours and must be seen.
POISON = (ValueError, LookupError, ArithmeticError, TypeError, AttributeError)
Entries = Sequence[tuple[str, Mapping[str, Any], *tuple[int, ...]]]


def lesson(state: bytes, entries: Entries, config: Mapping[str, Any]) -> bytes:
    """
    Fold entries (kind, body, service time, wall clock, cost) into a state under its rules.

    Raises:
        UnreadableMemory, UnreadableTree: The state is damaged, not an entry.
        PoisonLesson: One entry cannot be read; it names the first such.
    """
    try:
        return _folded(state, entries, config)
    # These are ValueErrors too, but the state is at fault: no entry may be set aside for it.
    except (UnreadableMemory, UnreadableTree):
        raise
    except POISON as error:
        place = _first_poison(state, entries, config)
        raise PoisonLesson(place, f"{type(error).__name__}: {error}") from error


def _folded(state: bytes, entries: Entries, config: Mapping[str, Any]) -> bytes:
    lessons = (Lesson(*entry) for entry in entries)
    return fold(Memory.from_bytes(state), lessons, Rules.from_config(config)).to_bytes()


def _first_poison(state: bytes, entries: Entries, config: Mapping[str, Any]) -> int:
    """Halve until one is left: the fold of a prefix fails exactly when it holds a bad entry."""
    good, bad = 0, len(entries)
    while bad - good > 1:
        middle = (good + bad) // 2
        try:
            _folded(state, entries[:middle], config)
        except POISON:
            bad = middle
        else:
            good = middle
    return bad - 1


def lawful(state: bytes, config: Mapping[str, Any]) -> bytes | None:
    """The law that bids are drawn from on a state, where the method has one."""
    tree = tree_rules(config)
    return None if tree is None else law_of(Memory.from_bytes(state).tree, tree).to_bytes()


def readable(state: bytes, config: Mapping[str, Any]) -> bool:
    """Whether this release can go on from a state."""
    try:
        lawful(state, config)
        # Every part reads its own state, even for no lesson.
        fold(Memory.from_bytes(state), (), Rules.from_config(config))
    except (UnreadableMemory, UnreadableTree):
        return False
    return True


def weigh(
    law: bytes, kind: str, price: int | None, floor: int, config: Mapping[str, Any]
) -> dict[str, Any]:
    """What an outcome of a bid drawn from a law carries; nothing once the method is another."""
    win_only = TREES.get(config["policy"]["method"])
    return {} if win_only is None else weight(law, kind, price, floor, win_only)
