"""The pure fold from stream entries to a memory, apart from what the sums are used for.

No clock, no chance, no storage, integers only. Between two moments the order of entries
does not matter, so a rebuild from zero gives the same bytes as learning piece by piece.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from operator import attrgetter
from typing import Any

from service.learner import exptree_lessons
from service.learner.cells import Cells, Sums
from service.learner.growing import earlier_lesson, grow, tree_lesson, value_lesson
from service.learner.lesson import SPENT
from service.learner.lesson import Lesson as Lesson
from service.learner.memory import Memory, Prior
from service.learner.parts import PARTS
from service.learner.rules import ACCRUES, ONCE, Rules
from service.learner.tally import NAMES, Tally

Body = Mapping[str, Any]
VALUES = ("known", "converted", "amount", "amount_square")
_SUMS, _VALUES = attrgetter(*NAMES), attrgetter(*VALUES)


def fold(memory: Memory, lessons: Iterable[Lesson], rules: Rules) -> Memory:
    """
    Add lessons to a memory; kinds that teach nothing only move its clock.

    Entries keep raw amounts and are cut at the ceiling here, so a changed ceiling refolds.

    Args:
        memory: What was learnt so far; never changed.
        lessons: In the order of the stream.
        rules: How they are read.
    """
    read = list(lessons)
    growing = _Growing(memory, rules)
    for lesson in read:
        # What teaches no more moves no clock either, as if it had never been said.
        if lesson.kind != SPENT:
            growing.take(lesson)
    tree = growing.grown_tree()
    return growing.grown(tree, _parts(memory, read, rules))


def _parts(memory: Memory, lessons: list[Lesson], rules: Rules) -> tuple[tuple[str, bytes], ...]:
    """Let each part that the configuration wants read the same lessons; others are dropped."""
    wanted = [name for name, part in PARTS.items() if part.wanted(rules)]
    parts = ((name, PARTS[name].learn(memory.part(name), lessons, rules)) for name in wanted)
    return tuple((name, state) for name, state in parts if state)


class _Growing:
    """A memory that is being added to; every lesson is O(log cells)."""

    def __init__(self, memory: Memory, rules: Rules) -> None:
        self._rules = rules
        self._sums = dict(zip(NAMES, _SUMS(memory.base), strict=True))
        self._cells = Cells(memory, rules)
        self._heard_ms, self._prior = memory.heard_ms, memory.prior
        self._ripe_ms, self._ripe_again_ms = memory.ripe_ms, memory.ripe_again_ms
        self._delays, self._delay_sum_ms = memory.delays, memory.delay_sum_ms
        self._tree, self._of_tree = memory.tree, list[exptree_lessons.Lesson]()

    def take(self, lesson: Lesson) -> None:
        """Let time pass up to the lesson, then add what it says."""
        # Between two moments only, or the order within one would decide what still counts.
        if lesson.at_ms > self._cells.clock_ms:
            self._pass_time(lesson.at_ms)
        teach = LESSONS.get(lesson.kind)
        if teach is not None:
            teach(self, lesson.body)
        if self._rules.tree is not None:
            self._also(tree_lesson(lesson.kind, lesson.body))
            self._also(earlier_lesson(lesson.kind, lesson.body))

    def grown(self, tree: bytes, parts: tuple[tuple[str, bytes], ...]) -> Memory:
        """What it came to, with what its tree and its parts came to."""
        cells, closed = self._cells.state
        values = zip(VALUES, _VALUES(self._cells.long_ago), strict=True)
        return Memory(
            base=Tally(**{**self._sums, **dict(values)}),
            cells=cells,
            closed=closed,
            clock_ms=self._cells.clock_ms,
            heard_ms=self._heard_ms,
            ripe_ms=self._ripe_ms,
            ripe_again_ms=self._ripe_again_ms,
            began_ms=self._cells.began_ms,
            delays=self._delays,
            delay_sum_ms=self._delay_sum_ms,
            prior=self._prior,
            watch=self._cells.watch,
            tree=tree,
            parts=parts,
        )

    def won(self, body: Body) -> None:
        """An impression bought at a price; of one retracted in part only the rest is read."""
        only = body.get("only")
        if only != "value":
            self._sums["wins"] += 1
            self._sums["late"] += bool(body.get("late"))
            self._sums["paid"] += body["price"]
            self._rounds(body["round"])
        if only != "market" and self._rules.paid_by == "won":
            self._bought()

    def billed(self, body: Body) -> None:
        """An impression paid for, where the bill is what counts."""
        if self._rules.paid_by == "billed":
            self._bought()

    def lost(self, body: Body) -> None:
        """A bid beaten on price."""
        self._sums["losses"] += 1
        self._rounds(body["round"])

    def void(self, body: Body) -> None:
        """A bid that failed for another reason."""
        self._sums["voids"] += 1
        self._rounds(body["round"])

    def over(self, body: Body) -> None:
        """Bids that are over, and passes under the floor, which are rounds lost."""
        self._sums["under_floor"] += body["under_floor"]
        self._rounds(body["rounds"] + body["under_floor"])

    def value(self, body: Body) -> None:
        """A value of an impression, or a correction of one."""
        now_ms, was = self._cells.clock_ms, body["was"]
        won_ms = body.get("won_ms", now_ms)
        self._sums["values_seen"] += was is None
        self._hear(now_ms)
        if body.get("before_reset") or self._forgotten(won_ms):
            return
        cell, first = self._cells.of(won_ms), was is None
        if self._rules.arrival == ONCE:
            cell.known += first
            before, after = was or 0, body["amount"]
        else:
            before = body.get("total_was", was or 0)
            after = before - (was or 0) + body["amount"]
        self._put(cell, before, after)
        self._also(value_lesson(body, before, after))
        # What waited for its win came no sooner than the win, but nobody knows when.
        if before == 0 < after and first and not body.get("parked"):
            self._delays += 1
            self._delay_sum_ms += now_ms - won_ms

    def guess(self, body: Body) -> None:
        """A prior that comes from elsewhere, or an empty one, which is taken back."""
        self._prior = Prior(body["per_impression"], body["typical"]) if body else None

    def reset(self, body: Body) -> None:
        """Begin afresh; the guess stays, since nobody learnt it here."""
        self._sums = dict.fromkeys(NAMES, 0)
        self._cells.clear()
        self._heard_ms = self._ripe_ms = self._ripe_again_ms = 0
        self._delays = self._delay_sum_ms = 0
        self._tree, self._of_tree = b"", []

    def _pass_time(self, at_ms: int) -> None:
        """Windows close with time, but stand still while the source of values is silent."""
        ripe_ms, silence_ms = at_ms, self._rules.silence_ms
        if silence_ms is not None and self._heard_ms:
            ripe_ms = min(at_ms, self._heard_ms + silence_ms)
        self._cells.pass_time(at_ms, self._ripe_ms if at_ms < self._ripe_again_ms else ripe_ms)

    def _hear(self, now_ms: int) -> None:
        """After a silence, what piled up gets as long again to come before windows go on."""
        silence_ms = self._rules.silence_ms
        # The second comparison says that something was heard before at all.
        if silence_ms is not None and now_ms > self._heard_ms + silence_ms > silence_ms:
            self._ripe_ms = self._heard_ms + silence_ms
            self._ripe_again_ms = now_ms + silence_ms
        self._heard_ms = now_ms

    def _forgotten(self, won_ms: int) -> bool:
        """Whether an impression of that moment can teach nothing any more."""
        if won_ms < self._cells.began_ms:
            return True
        late = self._cells.clock_ms - won_ms > self._rules.window_ms
        # Where one value is all there is, it counts however late it comes.
        if self._rules.arrival != ACCRUES or not late:
            return False
        # Where windows can stand still, only the cells know which of them have closed.
        return self._rules.silence_ms is None or self._cells.is_closed(won_ms)

    def _also(self, lesson: exptree_lessons.Lesson | None) -> None:
        if lesson is not None and self._rules.tree is not None:
            self._of_tree.append(lesson)

    def grown_tree(self) -> bytes:
        """What the tree came to."""
        # All at once, since a tree is unpacked and packed again for it.
        if self._rules.tree is None or not self._of_tree:
            return self._tree
        return grow(self._tree, self._of_tree, self._rules.tree)

    def _rounds(self, rounds: int) -> None:
        if rounds:
            self._sums["rounds"] += rounds
            self._cells.played(rounds)

    def _bought(self) -> None:
        self._cells.newest().bought += 1
        # The first impression begins the wait for values; without one there is no silence.
        self._heard_ms = self._heard_ms or self._cells.clock_ms

    def _put(self, cell: Sums, before: int, after: int) -> None:
        ceiling = self._rules.ceiling
        # Both are cut, so that a correction takes off what was once put there.
        cell.put(min(before, ceiling), min(after, ceiling))
        self._sums["clipped"] += (after > ceiling) - (before > ceiling)


LESSONS: dict[str, Callable[[_Growing, Body], None]] = {
    "won": _Growing.won,
    "billed": _Growing.billed,
    "lost": _Growing.lost,
    "void": _Growing.void,
    "tick": _Growing.over,
    "retire": _Growing.over,
    "value": _Growing.value,
    "prior": _Growing.guess,
    "reset": _Growing.reset,
}
