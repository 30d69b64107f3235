"""What a stream says of single impressions, for parts that learn of each by what was known of it.

Apart from the sums of the fold, which forget which impression a value came from.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from service.learner.lesson import Lesson
from service.learner.rules import ACCRUES, ONCE, Rules


@dataclass(frozen=True, slots=True)
class Said:
    """
    One word on one impression; money in nanos, each sum cut at the ceiling.

    Args:
        body: The entry, with what was known of the impression.
        counts: Whether the impression counts from now on.
        before: What it had brought before.
        after: What it has brought now.
    """

    body: Mapping[str, Any]
    counts: bool
    before: int = 0
    after: int = 0


def begun_afresh(lessons: Iterable[Lesson]) -> tuple[bool, list[Lesson]]:
    """Whether a reset is among the lessons, and those after the last one."""
    rest, reset = list[Lesson](), False
    for lesson in lessons:
        if lesson.kind == "reset":
            rest, reset = [], True
        else:
            rest.append(lesson)
    return reset, rest


def said(lessons: Iterable[Lesson], rules: Rules) -> Iterator[tuple[Lesson, Said]]:
    """What each lesson says of an impression; lessons that say nothing of one are left out."""
    for lesson in lessons:
        told = _said(lesson, rules)
        if told is not None:
            yield lesson, told


def _said(lesson: Lesson, rules: Rules) -> Said | None:
    body = lesson.body
    if lesson.kind == "value":
        return None if _too_late(lesson, rules) else _value(body, rules)
    # Where one value is the whole value, an impression without one is unknown, not worthless.
    if rules.arrival == ONCE or lesson.kind != rules.paid_by or body.get("only") == "market":
        return None
    return Said(body, counts=True)


def _value(body: Mapping[str, Any], rules: Rules) -> Said:
    was = body["was"]
    if rules.arrival == ONCE:
        before, after = was or 0, body["amount"]
        return Said(body, was is None, min(before, rules.ceiling), min(after, rules.ceiling))
    before = body.get("total_was", was or 0)
    after = before - (was or 0) + body["amount"]
    return Said(body, False, min(before, rules.ceiling), min(after, rules.ceiling))


def _too_late(lesson: Lesson, rules: Rules) -> bool:
    if lesson.body.get("before_reset"):
        return True
    late_ms = lesson.at_ms - lesson.body.get("won_ms", lesson.at_ms) - rules.window_ms
    # Where windows wait for a silent source, what comes after the silence is not too late.
    return rules.arrival == ACCRUES and rules.silence_ms is None and late_ms > 0
