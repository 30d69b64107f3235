"""What the two arms of a control share have bought, paid and brought, as a part of a memory.

Impressions stand in cells of time until their window has closed, so that what is compared has
had all its time, in both arms alike. It begins afresh when the plain rule itself changes, for
the two would be mixed; and at a reset, as every belief does. Integers only.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from service.learner.lesson import Lesson
from service.learner.memory import UnreadableMemory
from service.learner.rules import ONCE, Rules

NAME = "arms"
FORM = 1
CELLS = 32  # Closing a cell late by a part of a window delays a comparison by as much.
MAIN, CONTROL = "main", "control"
SUMS = ("bought", "paid", "converted", "amount")
BOUGHT, PAID, CONVERTED, AMOUNT = range(len(SUMS))

Body = Mapping[str, Any]
Row = list[int]


class UnreadableArms(UnreadableMemory):
    """The bytes are not arms of the form we write."""


@dataclass(slots=True)
class Arms:
    """
    Both arms while they are added to; money in nanos.

    Args:
        rule: The plain rule, as the stream said it; empty before one is known.
        cell_ms: How long a cell lasts.
        clock_ms: Service time of the last lesson.
        closed: How many cells from the beginning of time have closed.
        ripe: Sums of what had its time, by arm.
        cells: Sums of what is open, by arm and number of the cell.
    """

    rule: str = ""
    cell_ms: int = 1
    clock_ms: int = 0
    closed: int = 0
    ripe: dict[str, Row] = field(default_factory=dict)
    cells: dict[str, dict[int, Row]] = field(default_factory=dict)

    def all_of(self, arm: str, which: int) -> int:
        """One sum of an arm, open windows included."""
        rows = [self.ripe.get(arm, _none()), *self.cells.get(arm, {}).values()]
        return sum(row[which] for row in rows)

    def to_bytes(self) -> bytes:
        """Canonical JSON of integers and names: equal states give equal bytes."""
        content = {
            "form": FORM,
            "rule": self.rule,
            "numbers": [self.cell_ms, self.clock_ms, self.closed],
            "ripe": self.ripe,
            "cells": {
                arm: [[at, *cells[at]] for at in sorted(cells)] for arm, cells in self.cells.items()
            },
        }
        return json.dumps(content, sort_keys=True, separators=(",", ":")).encode()


def read(state: bytes) -> Arms:
    """
    Read what `to_bytes` wrote; no bytes are arms before the first lesson.

    Raises:
        UnreadableArms: Another form, or not whole.
    """
    if not state:
        return Arms()
    try:
        content = json.loads(state)
        if content["form"] != FORM:
            raise UnreadableArms("not the form of arms this release writes")
        cells = {arm: {row[0]: row[1:] for row in rows} for arm, rows in content["cells"].items()}
        cell_ms, clock_ms, closed = content["numbers"]
        return Arms(content["rule"], cell_ms, clock_ms, closed, content["ripe"], cells)
    except (ValueError, TypeError, LookupError, AttributeError) as error:
        raise UnreadableArms("not arms") from error


def wanted(rules: Rules) -> bool:
    """Whether a configuration has a control share."""
    return rules.control


def learn(state: bytes, lessons: Sequence[Lesson], rules: Rules) -> bytes:
    """
    Count what lessons tell of each arm; pure.

    Raises:
        UnreadableArms: The state is damaged.
    """
    arms = read(state)
    for lesson in lessons:
        # An entry of a release that knew of no control share says nothing of it.
        if lesson.kind in ("create", "edit") and "control" in lesson.body:
            arms = _ruled(arms, lesson.body["control"], rules)
        elif lesson.kind == "reset":
            arms = Arms(arms.rule, arms.cell_ms, arms.clock_ms, arms.closed)
        if arms.rule:
            _pass_time(arms, lesson.at_ms, rules.window_ms)
            _take(arms, lesson, rules)
    return arms.to_bytes() if arms.rule else b""


def _ruled(arms: Arms, said: Mapping[str, Any] | None, rules: Rules) -> Arms:
    # The share is left out: more or less traffic makes no other rule.
    rule = "" if said is None else f"{said['method']} {said['price']}"
    if rule == arms.rule:
        return arms
    return Arms(rule, max(1, rules.window_ms // CELLS))


def _pass_time(arms: Arms, at_ms: int, window_ms: int) -> None:
    if at_ms <= arms.clock_ms:
        return
    arms.clock_ms = at_ms
    # The whole cell must have had its window, so one that begins later waits for its end.
    arms.closed = max(arms.closed, (at_ms - window_ms) // arms.cell_ms)
    for arm, cells in arms.cells.items():
        for at in [at for at in cells if at < arms.closed]:
            _add(arms.ripe.setdefault(arm, _none()), cells.pop(at))


def _take(arms: Arms, lesson: Lesson, rules: Rules) -> None:
    body, kind = lesson.body, lesson.kind
    arm = body.get("arm") or MAIN
    if kind == rules.paid_by and body.get("only") != "market":
        # What is charged above the bid is in dispute, and is no price of either arm.
        paid = min(body["price"], body.get("bid", body["price"]))
        _put(arms, arm, lesson.at_ms, [1, paid, 0, 0])
    elif kind == "value" and not body.get("before_reset"):
        before, after = _told(body, rules)
        ceiling = rules.ceiling
        amount = min(after, ceiling) - min(before, ceiling)
        # By the time of the win, or arms with slower values would look the poorer.
        won_ms = body.get("won_ms", lesson.at_ms)
        _put(arms, arm, won_ms, [0, 0, (after > 0) - (before > 0), amount])


def _told(body: Body, rules: Rules) -> tuple[int, int]:
    """What the impression had brought before and after this value, as the sums count it."""
    was = body["was"] or 0
    if rules.arrival == ONCE:
        return was, body["amount"]
    before = body.get("total_was", was)
    return before, before - was + body["amount"]


def _put(arms: Arms, arm: str, at_ms: int, sums: Row) -> None:
    at = at_ms // arms.cell_ms
    # What comes after its window has closed comes too late, in both arms.
    if at >= arms.closed:
        _add(arms.cells.setdefault(arm, {}).setdefault(at, _none()), sums)


def _add(row: Row, sums: Row) -> None:
    for which, one in enumerate(sums):
        row[which] += one


def _none() -> Row:
    return [0] * len(SUMS)
