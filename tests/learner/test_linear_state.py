"""Linear weights survive their bytes to the last bit, stay small, and refuse what is foreign."""

from __future__ import annotations

import numpy as np
import pytest

from service.learner import linear, linear_state
from service.learner.linear import Lesson, Ridge
from service.learner.linear_state import UnreadableRidge


def _lessons(count: int, dimensions: int) -> list[Lesson]:
    rng = np.random.default_rng(7)
    vectors = rng.standard_normal((count, dimensions))
    return [Lesson(x, float(y)) for x, y in zip(vectors, 1e9 * rng.random(count), strict=True)]


TAUGHT = linear.learn(Ridge.fresh(16), _lessons(300, 16))


@pytest.mark.parametrize("cut", [1, 255, 256, 1000, 2047, 2048, 2999])
def test_a_fold_in_pieces_gives_the_same_bytes(cut: int) -> None:
    """Written and read in between, across checks and factorings, with amounts in nanos."""
    lessons = _lessons(3_000, 16)
    whole = linear.learn(Ridge.fresh(16), lessons)
    first = linear_state.to_bytes(linear.learn(Ridge.fresh(16), lessons[:cut]))
    pieces = linear.learn(linear_state.from_bytes(first, 16, 1.0), lessons[cut:])
    assert linear_state.to_bytes(pieces) == linear_state.to_bytes(whole)


def test_forgetting_in_pieces_gives_the_same_bytes() -> None:
    """A ridge that was written and read is forgotten alike."""
    read = linear_state.from_bytes(linear_state.to_bytes(TAUGHT), 16, 1.0)
    ours, theirs = (linear_state.to_bytes(linear.discount(one, 0.9)) for one in (TAUGHT, read))
    assert ours == theirs


@pytest.mark.parametrize(("dimensions", "size"), [(16, 2_346), (32, 8_746), (64, 33_834)])
def test_the_state_is_at_most_40_kib(dimensions: int, size: int) -> None:
    """Half of two matrices, one vector and a head."""
    ridge = linear.learn(Ridge.fresh(dimensions), _lessons(100, dimensions))
    assert len(linear_state.to_bytes(ridge)) == size <= 40 * 1024


def test_more_than_64_dimensions_are_refused() -> None:
    """They would not fit."""
    with pytest.raises(UnreadableRidge, match="64"):
        linear_state.to_bytes(Ridge.fresh(65))


def test_the_state_names_the_code_that_made_it() -> None:
    """Eight bytes, the same within a process, read back from a state."""
    assert linear_state.made_by(linear_state.to_bytes(TAUGHT)) == linear_state.code_version()
    assert len(linear_state.code_version()) == 8
    with pytest.raises(UnreadableRidge):
        linear_state.made_by(b"lin")


def test_any_damaged_byte_is_noticed() -> None:
    """Bytes changed all over, shorter states, and a longer one."""
    state = linear_state.to_bytes(TAUGHT)
    spoilt = [
        state[:at] + bytes([state[at] ^ 0x10]) + state[at + 1 :] for at in range(0, len(state), 7)
    ]
    for wrong in (*spoilt, b"", b"{}", state[:50], state[:-8], state + b"\0"):
        with pytest.raises(UnreadableRidge):
            linear_state.from_bytes(wrong, 16, 1.0)


@pytest.mark.parametrize(("dimensions", "penalty"), [(15, 1.0), (32, 1.0), (16, 2.0)])
def test_other_settings_are_refused(dimensions: int, penalty: float) -> None:
    """Another size or ridge."""
    with pytest.raises(UnreadableRidge):
        linear_state.from_bytes(linear_state.to_bytes(TAUGHT), dimensions, penalty)


def test_what_is_not_finite_is_refused() -> None:
    """A state that overflowed is never read as weights."""
    ridge = Ridge(1.0, np.eye(2), np.eye(2), np.array([np.inf, 0.0]))
    with pytest.raises(UnreadableRidge, match="numbers"):
        linear_state.from_bytes(linear_state.to_bytes(ridge), 2, 1.0)
