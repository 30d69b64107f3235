"""Parts of a memory that only some configurations want, each a state of its own in bytes.

A part reads the same lessons as the sums do, in the same fold, and knows nothing of them or of
other parts. So a line item without a budget to pace or features to learn from carries neither.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from service.learner import arm_part, hint_part, linear_part, market_part, pace_part, return_part
from service.learner.lesson import Lesson
from service.learner.rules import Rules


@dataclass(frozen=True, slots=True)
class Part:
    """
    One part.

    Args:
        wanted: Whether a configuration has it; where not, its state is dropped.
        learn: State (no bytes before the first lesson), lessons and rules in, state out. Pure;
            resets come among the lessons.
    """

    wanted: Callable[[Rules], bool]
    learn: Callable[[bytes, Sequence[Lesson], Rules], bytes]


PACE, RETURN = "pace", "return"
# By name, in the order in which a memory keeps them.
PARTS: dict[str, Part] = {
    arm_part.NAME: Part(arm_part.wanted, arm_part.learn),
    "hints": Part(lambda rules: rules.hints, hint_part.learn),
    "linear": Part(lambda rules: rules.dimensions > 0, linear_part.learn),
    market_part.NAME: Part(market_part.wanted, market_part.learn),
    PACE: Part(lambda rules: rules.paced, lambda state, said, _: pace_part.learn(state, said)),
    RETURN: Part(lambda rules: rules.returning is not None, return_part.learn),
}
