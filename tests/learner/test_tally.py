"""The tally round-trips, merges, and refuses bytes it did not write."""

from __future__ import annotations

import json

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.tally import NAMES, Tally, UnreadableTally

TALLIES = some.builds(Tally, **{name: some.integers(-(2**80), 2**80) for name in NAMES})


@given(TALLIES)
def test_a_tally_survives_its_bytes(tally: Tally) -> None:
    """What is written is read back equal, and written again byte for byte."""
    state = tally.to_bytes()

    assert Tally.from_bytes(state) == tally
    assert Tally.from_bytes(state).to_bytes() == state


@given(TALLIES, TALLIES, TALLIES)
def test_merging_is_adding(one: Tally, two: Tally, three: Tally) -> None:
    """The order and grouping of merges do not matter, and a fresh tally adds nothing."""
    assert one.merge(two) == two.merge(one)
    assert one.merge(two).merge(three) == one.merge(two.merge(three))
    assert one.merge(Tally.fresh()) == one


@pytest.mark.parametrize(
    "state",
    [
        b"",
        b"\xff",
        b"[]",
        b"{}",
        Tally().to_bytes().replace(b'"form":1', b'"form":2'),
        Tally().to_bytes().replace(b'"wins":0', b'"wins":0.5'),
        Tally().to_bytes().replace(b'"wins":0', b'"wins":true'),
        Tally().to_bytes().replace(b'"wins":0', b'"gains":0'),
    ],
)
def test_foreign_bytes_are_refused(state: bytes) -> None:
    """Bytes of another form never become a tally."""
    with pytest.raises(UnreadableTally):
        Tally.from_bytes(state)


def test_the_bytes_are_canonical_json() -> None:
    """Keys are sorted, numbers are integers, and the form is named."""
    state = Tally(wins=3, amount=10**30).to_bytes()

    content = json.loads(state)
    assert list(content) == sorted(content)
    assert content["form"] == 1
    assert content["amount"] == 10**30
