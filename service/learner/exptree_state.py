"""What the tree of exponential weights has learnt, as integers, and its bytes."""

from __future__ import annotations

import struct
from collections.abc import Iterable
from dataclasses import dataclass
from itertools import pairwise

from service.learner.exptree_rules import DOUBLINGS_MAX, FIRST, Rules, Stage
from service.learner.partition import narrowest
from service.learner.sealed import sealed, unsealed

FORM = 1

# name, form, top, tick, ceiling, win only, rate or 0
_RULES = struct.Struct(">3sBQQQ?d")
# rounds, stage, lessons, counted, beyond, unweighed, number of cuts
_COUNTS = struct.Struct(">QBBQQQQH")
_CUT = struct.Struct(">H16s")
_NAME = b"xpt"


class UnreadableTree(ValueError):
    """The bytes are not a tree of the form we write, or of other rules."""


@dataclass(frozen=True, slots=True)
class Tree:
    """
    A partition of the bids and how the log-weight steps from each interval to the next.

    A credit goes to all bids above a price, so it is one number added at the price's tick;
    the log-weight of an interval is the sum of all steps up to it. Integers only, so the
    tree is the same in whatever order the lessons came.

    Args:
        rounds: Opportunities priced that are known to be over.
        stage: The furthest stage seen.
        steps: Tick and step in units of 2^-40 nats, ascending; a cut stays though its step
            is 0. Only lessons of this stage are in the steps.
        lessons: Wins and losses that taught.
        counted: Those of them that are in the steps.
        beyond: Outcomes whose price no bid could beat; they teach nothing.
        unweighed: Outcomes that could not teach: a loss without its price, or an epoch lost.
    """

    rounds: int = 0
    stage: Stage = FIRST
    steps: tuple[tuple[int, int], ...] = ()
    lessons: int = 0
    counted: int = 0
    beyond: int = 0
    unweighed: int = 0

    @staticmethod
    def fresh() -> Tree:
        """The tree before the first lesson: one interval, weight one."""
        return Tree()

    def width(self, rules: Rules) -> float:
        """The narrowest interval as a share of the range of bids; `width` of the bounds."""
        return narrowest((tick for tick, _ in self.steps), rules.ticks.cells) / rules.ticks.cells

    def to_bytes(self, rules: Rules) -> bytes:
        """Equal trees of equal rules give equal bytes; 18 for each cut and 85 more."""
        counts = _COUNTS.pack(
            *(self.rounds, *self.stage, self.lessons, self.counted),
            *(self.beyond, self.unweighed, len(self.steps)),
        )
        cuts = (_CUT.pack(tick, step.to_bytes(16, signed=True)) for tick, step in self.steps)
        body = _head(rules) + counts + b"".join(cuts)
        return sealed(body)

    @staticmethod
    def from_bytes(state: bytes, rules: Rules) -> Tree:
        """
        Read what `to_bytes` wrote under the same rules.

        Raises:
            UnreadableTree: Another form, other rules, or not whole.
        """
        body = _checked(state, _head(rules))
        rounds, by_rounds, by_width, lessons, counted, beyond, unweighed, cuts = (
            _COUNTS.unpack_from(body)
        )
        if len(body) != _COUNTS.size + cuts * _CUT.size or max(by_rounds, by_width) > DOUBLINGS_MAX:
            raise UnreadableTree("not whole")
        steps = tuple(_steps(body[_COUNTS.size :]))
        edges = [0, *(tick for tick, _ in steps), rules.ticks.cells]
        if any(left >= right for left, right in pairwise(edges)) or counted > lessons:
            raise UnreadableTree("not a tree")
        return Tree(rounds, (by_rounds, by_width), steps, lessons, counted, beyond, unweighed)


def _head(rules: Rules) -> bytes:
    ticks = rules.ticks
    # Nought stands for doubling, since no rate is nought.
    numbers = (ticks.top, ticks.tick, rules.ceiling, rules.win_only, rules.rate or 0.0)
    return _RULES.pack(_NAME, FORM, *numbers)


def _checked(state: bytes, head: bytes) -> bytes:
    body, sound = unsealed(state)
    if len(body) < len(head) + _COUNTS.size or body[:4] != head[:4]:
        raise UnreadableTree("not the form of tree this release writes")
    if not sound:
        raise UnreadableTree("damaged")
    if body[: len(head)] != head:
        raise UnreadableTree("a tree of other rules")
    return body[len(head) :]


def _steps(packed: bytes) -> Iterable[tuple[int, int]]:
    for tick, step in _CUT.iter_unpack(packed):
        yield tick, int.from_bytes(step, signed=True)
