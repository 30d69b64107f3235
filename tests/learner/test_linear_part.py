"""The sums behind a ridge: those of Sherman and Morrison, exact in any order, and small."""

from __future__ import annotations

from base64 import b64encode
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import hashing, linear
from service.learner.fold import Lesson, fold
from service.learner.linear_part import Sums, UnreadableSums, learn
from service.learner.memory import Memory
from service.learner.rules import ONCE, Rules

CEILING = 100_000_000
OF_ONCE = Rules(CEILING, ONCE, 6400, dimensions=16)
ACCRUING = Rules(CEILING, "accrues", 6400, dimensions=16)
DEVICES = ("phone", "tablet", "desk")


def features(device: str, hour: int) -> hashing.Hashed:
    """The hashed features of an impression."""
    return hashing.hashed({"device": device, "hour": hour}, b"invented")


def known(device: str, hour: int) -> dict[str, str]:
    """The same as entries carry it."""
    return {"features": b64encode(hashing.to_bytes(features(device, hour))).decode()}


def played(count: int, seed: int) -> list[tuple[hashing.Hashed, int, list[Lesson]]]:
    """Impressions of one value each, with the entries of both ways in which values arrive."""
    rng = np.random.default_rng(seed)
    rows = list[tuple[hashing.Hashed, int, list[Lesson]]]()
    for at in range(count):
        of = DEVICES[int(rng.integers(3))], int(rng.integers(24))
        amount = int(rng.integers(0, 2 * CEILING))
        won = Lesson("won", {"price": 5, "round": 1, **known(*of)}, at)
        body = {"amount": amount, "was": None, "won_ms": at, "total_was": 0, **known(*of)}
        rows.append((features(*of), amount, [won, Lesson("value", body, at + 1)]))
    return rows


@pytest.mark.parametrize("rules", [OF_ONCE, ACCRUING])
@pytest.mark.parametrize("dimensions", hashing.SIZES)
def test_the_ridge_is_that_of_sherman_and_morrison(rules: Rules, dimensions: int) -> None:
    """Folded one lesson at a time, the published update gives the same within 1e-9."""
    rows = played(700, 1)
    of = replace(rules, dimensions=dimensions)
    state = learn(b"", [lesson for _, _, lessons in rows for lesson in lessons], of)
    ridge = Sums.from_bytes(state, dimensions).ridge(1.0, CEILING)
    singly = linear.learn(
        linear.Ridge.fresh(dimensions),
        [
            linear.Lesson(hashing.dense(hashed, dimensions), min(amount, CEILING) / CEILING)
            for hashed, amount, _ in rows
        ],
    )

    assert ridge.lessons == singly.lessons == 700
    assert np.abs(ridge.weights - singly.weights).max() < 1e-9
    assert np.abs(ridge.inverse - singly.inverse).max() < 1e-9
    assert ridge.log_det == pytest.approx(singly.log_det, rel=1e-9)
    assert ridge.drift < 1e-9


@given(some.randoms(use_true_random=False), some.integers(0, 400))
def test_any_order_and_any_cut_give_the_same_bytes(chance: Any, cut: int) -> None:
    """The sums are whole numbers, so nothing depends on the way they came about."""
    lessons = [lesson for _, _, pair in played(200, 2) for lesson in pair]
    shuffled = list(lessons)
    chance.shuffle(shuffled)
    in_pieces = learn(learn(b"", shuffled[:cut], OF_ONCE), shuffled[cut:], OF_ONCE)

    assert in_pieces == learn(b"", lessons, OF_ONCE) != b""


def test_corrections_and_later_values_put_the_sum_right() -> None:
    """Values accrue, a correction takes its part back, and a reset forgets all."""
    won = Lesson("won", {"price": 5, "round": 1, **known("phone", 1)}, 10)
    said = {"won_ms": 10, **known("phone", 1)}
    first = Lesson("value", {"amount": 30, "was": None, "total_was": 0, **said}, 20)
    more = Lesson("value", {"amount": 50, "was": None, "total_was": 30, **said}, 30)
    less = Lesson("value", {"amount": 10, "was": 30, "total_was": 80, **said}, 40)
    late = Lesson("value", {"amount": 99, "was": None, "total_was": 60, **said}, 10 + 6401)
    alone = Lesson("value", {"amount": 60, "was": None, "total_was": 0, **said}, 20)
    state = learn(b"", [won, first, more, less, late], ACCRUING)

    assert state == learn(b"", [won, alone], ACCRUING)
    assert learn(state, [Lesson("reset", {})], ACCRUING) == b""
    assert learn(state, [Lesson("reset", {}), won], ACCRUING) == learn(b"", [won], ACCRUING)


def test_what_says_nothing_of_features_teaches_nothing() -> None:
    """Bids of another method, what was cancelled, and what was won before a reset."""
    silent = [
        Lesson("won", {"price": 5, "round": 1}),
        Lesson("won", {"price": 5, "round": 1, "only": "market", **known("phone", 1)}),
        Lesson("billed", {"price": 5, **known("phone", 1)}),
        Lesson("value", {"amount": 7, "was": None}),
        Lesson("value", {"amount": 7, "was": None, "before_reset": True, **known("phone", 1)}),
        Lesson("lost", {"to_win": 4, "round": 1}),
    ]
    assert learn(b"", silent, ACCRUING) == b""


def test_a_state_is_small_and_read_back_or_refused() -> None:
    """At 64 dimensions below 40 KiB, also in a memory; other bytes are another state's."""
    rules = replace(OF_ONCE, dimensions=64)
    lessons = [lesson for _, _, pair in played(300, 3) for lesson in pair]
    state = learn(b"", lessons, rules)

    assert Sums.from_bytes(state, 64).to_bytes() == state
    assert len(state) < 18 * 1024
    assert len(fold(Memory.fresh(), lessons, rules).to_bytes()) < 40 * 1024
    for wrong, size in ((state[:-1], 64), (state, 32), (b"lin", 64), (state[:20], 16)):
        with pytest.raises(UnreadableSums):
            Sums.from_bytes(wrong, size)


def test_sums_that_nothing_can_have_are_refused() -> None:
    """A sum of squares below nothing has no ellipsoid, and must not become a price."""
    with pytest.raises(UnreadableSums):
        Sums(np.full((16, 16), -(2**40), dtype=np.int64), (0,) * 16, 1).ridge(1.0, CEILING)
