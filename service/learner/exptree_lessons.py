"""What an outcome tells a tree of exponential weights, apart from how it is learnt.

A win and its value are two lessons, because a value comes late and may be corrected.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from service.learner.exptree_rules import DOUBLINGS_MAX, Stage

CHANCE_MIN = 2.0**-80  # A win by less is none that happens; its credit would not fit a step.
ROUNDS_MAX = 2**32  # In one lesson; so many lessons fit a tree's eight bytes.


class BadLesson(ValueError):
    """A lesson that no bid of ours can have given; nothing must be learnt from it."""


@dataclass(frozen=True, slots=True)
class Won:
    """
    A win, as if it were worth nothing; `Worth` tells the rest.

    Args:
        price: Competing bid in nanos, the price paid.
        chance: `Law.chance_above` of that price in the bid's epoch; 0 where the win was a tie
            that no higher bid could have made; None if that law is lost.
        stage: The stage of that law; None if it is lost.
        rounds: 1, or 0 where the round was counted before.
    """

    price: int
    chance: float | None
    stage: Stage | None
    rounds: int = 1


@dataclass(frozen=True, slots=True)
class Lost:
    """A loss; `price` is the competing bid in nanos, None where the feed does not tell."""

    price: int | None
    stage: Stage | None
    rounds: int = 1


@dataclass(frozen=True, slots=True)
class Worth:
    """A value in nanos of the win with these numbers, or a correction of one that was."""

    price: int
    chance: float | None
    stage: Stage | None
    amount: int
    was: int = 0


@dataclass(frozen=True, slots=True)
class Passed:
    """Rounds that are over and teach nothing."""

    rounds: int


Lesson = Won | Lost | Worth | Passed


def check(lesson: Lesson) -> None:
    """
    Refuse what cannot be, before it moves anything.

    Raises:
        BadLesson: See there.
    """
    if isinstance(lesson, Passed):
        _whole(lesson.rounds, most=ROUNDS_MAX)
        return
    _whole(lesson.price if lesson.price is not None else 0)
    if lesson.stage is not None:
        _stage(lesson.stage)
    if isinstance(lesson, Worth):
        _whole(lesson.amount, lesson.was)
    else:
        _whole(lesson.rounds, most=ROUNDS_MAX)
    if not isinstance(lesson, Lost) and lesson.chance is not None:
        _chance(lesson.chance)


def _whole(*numbers: int, most: float = math.inf) -> None:
    # To isinstance True is an int too, and no count of ours.
    if any(type(number) is not int or not 0 <= number <= most for number in numbers):
        raise BadLesson("a count, a price or an amount is not a whole number in its range")


def _stage(stage: Stage) -> None:
    if type(stage) is not tuple or len(stage) != 2:
        raise BadLesson("a stage is two counts of doublings")
    _whole(*stage, most=DOUBLINGS_MAX)


def _chance(chance: float) -> None:
    if not 0.0 <= chance <= 1.0:
        raise BadLesson("a chance must be between 0 and 1")
