"""The return target as a part of a memory: what was paid, what came of it, and the multiplier.

Values count when they come and prices when they are paid, so lambda leans on the target while
values are on their way, and lets go when they come. Each value is cut at the ceiling, as it is
taught. A retracted win or value counts as never bought; a reset counts from there on.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from service.learner import return_target
from service.learner.lesson import Lesson
from service.learner.memory import UnreadableMemory
from service.learner.return_target import Return, UnreadableReturn
from service.learner.rules import Rules


class UnreadablePart(UnreadableMemory):
    """The bytes are not a return of these rules."""


def read(state: bytes, rules: return_target.Rules) -> Return:
    """
    The return of these bytes; the first one of none.

    Raises:
        UnreadablePart: Another form, or another target.
    """
    try:
        return Return.from_bytes(state, rules) if state else Return()
    except UnreadableReturn as error:
        raise UnreadablePart("not a return of these rules") from error


def learn(state: bytes, lessons: Sequence[Lesson], rules: Rules) -> bytes:
    """Fold lessons into what was got and paid."""
    of = rules.returning
    if of is None:
        return b""
    now = read(state, of)
    for lesson in lessons:
        now = _taught(now, lesson, of, rules.ceiling)
    return now.to_bytes(of)


def _taught(now: Return, lesson: Lesson, of: return_target.Rules, ceiling: int) -> Return:
    body = lesson.body
    if lesson.kind == "reset":
        return Return()
    gained = _gained(body, ceiling) if lesson.kind == "value" else 0
    # Of a win whose values are retracted nothing can come, so its price is no fair loss.
    fair = body.get("only") != "market"
    # What a price asks beyond the bid is disputed until people settle it.
    bought = fair and lesson.kind in ("won", "billed", "conflict")
    paid = min(lesson.cost, body.get("bid", lesson.cost)) if bought else 0
    return return_target.learn(now, gained, paid, of) if gained or paid else now


def _gained(body: Mapping[str, Any], ceiling: int) -> int:
    if body.get("before_reset"):
        return 0
    return min(int(body["amount"]), ceiling) - min(int(body["was"] or 0), ceiling)
