"""A return target from the fold to the price: what a unit of money brought after many rounds."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from service.decision.learnability import defaults
from service.decision.price import Proposal, ready
from service.decision.terms import Terms
from service.learner import return_part
from service.learner.fold import fold
from service.learner.lesson import Lesson
from service.learner.memory import Memory
from service.learner.parts import RETURN
from service.learner.return_target import Return
from service.learner.rules import Rules
from tests.decision.invented import CAP, partial

TARGET = 4.0
WORTH, CHANCE = 40_000_000, 0.1  # On average half the cap.
BLOCKS, PER_BLOCK, LATE_BLOCKS = 800, 20, 2


@cache
def run(*, strict: bool, target: float = TARGET) -> tuple[Return, Return]:
    """
    What was got and paid by half time and in all; values come two snapshots after their wins.

    A target of next to nothing stands for none: lambda then leaves the bid at the cap.
    """
    base = partial("mean")
    value = {**base["value"], "typical": WORTH}
    wish = {"value_per_unit": round(target * 10**6), "strict": strict}
    config = defaults({**base, "value": value, "return_target": wish})[0]
    terms, rules, rng = Terms.from_config(config), Rules.from_config(config), _rng()
    memory, half, values = Memory.fresh(), Return(), list[Lesson]()
    for block in range(BLOCKS):
        answer = ready(memory, terms).answer
        assert isinstance(answer, Proposal)
        lessons = [one for one in values if one.at_ms == block]
        values = [one for one in values if one.at_ms > block]
        for rival in rng.integers(0, CAP, PER_BLOCK).tolist():
            if rival > answer.price:
                lessons.append(Lesson("lost", {"round": 1}, block))
                continue
            lessons.append(Lesson("won", {"price": rival, "round": 1}, block, block, rival))
            amount = WORTH if rng.random() < CHANCE else 0
            told = {"amount": amount, "was": None, "won_ms": block}
            values.append(Lesson("value", told, block + LATE_BLOCKS))
        memory = fold(memory, lessons, rules)
        half = _returned(memory, rules) if block < BLOCKS // 2 else half
    return half, _returned(fold(memory, values, rules), rules)


def _returned(memory: Memory, rules: Rules) -> Return:
    assert rules.returning is not None
    return return_part.read(memory.part(RETURN), rules.returning)


def _rng() -> np.random.Generator:
    return np.random.default_rng(11)


def test_without_a_target_that_binds_a_unit_brings_less() -> None:
    """Buying everything against uniform rivals brings one, so that four binds."""
    _, free = run(strict=False, target=0.01)
    assert free.valued / free.paid == pytest.approx(1.0, rel=0.1)


def test_on_average_the_target_is_held_once_lambda_has_found_its_place() -> None:
    """Within a tenth in the second half; what is missed on the way there is missed once."""
    half, end = run(strict=False)
    second = (end.valued - half.valued) / (end.paid - half.paid)
    assert second == pytest.approx(TARGET, rel=0.1)
    assert half.valued / half.paid < end.valued / end.paid < TARGET


def test_the_strict_form_brings_at_least_the_target() -> None:
    """From the first half on, and less value for it than holding it on average does."""
    half, end = run(strict=True)
    assert half.valued / half.paid >= TARGET
    assert end.valued / end.paid >= TARGET
    assert end.valued <= run(strict=False)[1].valued
