"""Bytes in, bytes out: what the store asks of a learner, which is bytes to it; pure."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from service.learner.exptree_state import UnreadableTree
from service.learner.fold import Lesson, fold
from service.learner.growing import law_of, weight
from service.learner.memory import Memory, UnreadableMemory
from service.learner.rules import Rules, tree_rules

FRESH = Memory.fresh().to_bytes()  # The state of a learner before its first lesson.


def lesson(
    state: bytes, entries: list[tuple[str, Mapping[str, Any], int]], config: Mapping[str, Any]
) -> bytes:
    """Fold entries (kind, body, service time) into a state under a line item's rules."""
    lessons = (Lesson(*entry) for entry in entries)
    return fold(Memory.from_bytes(state), lessons, Rules.from_config(config)).to_bytes()


def lawful(state: bytes, config: Mapping[str, Any]) -> bytes | None:
    """The law that bids are drawn from on a state, where the method has one."""
    tree = tree_rules(config)
    return None if tree is None else law_of(Memory.from_bytes(state).tree, tree).to_bytes()


def readable(state: bytes, config: Mapping[str, Any]) -> bool:
    """Whether this release can go on from a state."""
    try:
        lawful(state, config)
        Memory.from_bytes(state)
    except (UnreadableMemory, UnreadableTree):
        return False
    return True


def weigh(
    law: bytes, kind: str, price: int | None, floor: int, config: Mapping[str, Any]
) -> dict[str, Any]:
    """What an outcome of a bid drawn from a law carries; nothing once the method is another."""
    tree = tree_rules(config)
    return {} if tree is None else weight(law, kind, price, floor, tree.win_only)
