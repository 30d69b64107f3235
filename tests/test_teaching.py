"""Bytes in, bytes out: folding, the law of a state, and what an outcome carries."""

from __future__ import annotations

from base64 import b64encode

import pytest

from service.errors import PoisonLesson
from service.learner.exptree_law import Law
from service.learner.hashing import to_bytes
from service.learner.memory import Memory, UnreadableMemory
from service.teaching import FRESH, Entries, lawful, lesson, readable, weigh
from tests.builders import CAP, line_item

EXPTREE = line_item(policy={"method": "exptree"}, losses="priced")
WIN = {"price": 5, "bid": 9, "source": "default", "round": 1, "late": False}


def test_entries_become_a_state() -> None:
    """One win, read back; and without entries the state stays to the byte."""
    state = lesson(FRESH, [("won", WIN, 7)], line_item())

    assert Memory.from_bytes(state).total.wins == 1
    assert Memory.from_bytes(state).clock_ms == 7
    assert lesson(state, [], line_item()) == state


def test_a_state_that_is_none_is_refused() -> None:
    """Bytes of another release are never folded on."""
    with pytest.raises(UnreadableMemory):
        lesson(b'{"form":1}', [], line_item())


def test_only_a_method_that_draws_from_a_law_has_one() -> None:
    """The first law may bid any price below the cap."""
    law = lawful(FRESH, EXPTREE)

    assert lawful(FRESH, line_item()) is None
    assert law is not None
    assert 0 < Law.from_bytes(law).quantile(0.01) < Law.from_bytes(law).quantile(0.99) < CAP


def test_an_outcome_carries_its_chance_and_stage() -> None:
    """Unless the method has changed since the bid, when nothing could read them."""
    law = lawful(FRESH, EXPTREE)
    assert law is not None
    said = weigh(law, "won", CAP // 2, 0, EXPTREE)

    assert said == {"stage": said["stage"], "chance": pytest.approx(0.5, abs=0.01)}
    assert weigh(law, "won", CAP // 2, 0, line_item()) == {}


def test_parts_of_another_configuration_are_not_read() -> None:
    """A ridge of 32 places is none of 64: neither folded on nor called readable."""
    of = {size: line_item(policy={"method": "linear", "dimensions": size}) for size in (32, 64)}
    seen = {"features": b64encode(to_bytes(((3, 256),))).decode()}
    entries: Entries = [
        ("won", {**WIN, **seen}, 7),
        ("value", {"amount": 5, "was": None, **seen}, 8),
    ]
    state = lesson(FRESH, entries, of[32])

    assert readable(state, of[32])
    assert not readable(state, of[64])
    assert readable(FRESH, of[64])
    with pytest.raises(UnreadableMemory):
        lesson(state, entries, of[64])


@pytest.mark.parametrize("features", ["AA==", "no base64!", b64encode(b"\xff\1\0").decode()])
def test_features_that_are_damaged_are_one_poisoned_entry(features: str) -> None:
    """They are set aside alone, and named by their place."""
    config = line_item(policy={"method": "linear", "dimensions": 32})
    wrong = ("value", {"amount": 5, "was": None, "features": features}, 8)
    with pytest.raises(PoisonLesson) as poison:
        lesson(FRESH, [("won", WIN, 7), wrong, ("won", WIN, 9)], config)
    assert poison.value.place == 1
