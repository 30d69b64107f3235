"""A state that lost or changed a bit is told from one that is whole."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as some

from service.learner.sealed import sealed, unsealed


@given(some.binary(max_size=60))
def test_what_was_sealed_is_whole(body: bytes) -> None:
    """The bytes come back as they were, and sound."""
    assert unsealed(sealed(body)) == (body, True)


@given(some.binary(max_size=60), some.data())
def test_every_changed_bit_is_seen(body: bytes, data: some.DataObject) -> None:
    """In the bytes or in their checksum; a checksum of 32 bits sees any one bit."""
    state = bytearray(sealed(body))
    place = data.draw(some.integers(0, 8 * len(state) - 1))
    state[place // 8] ^= 1 << place % 8

    assert not unsealed(bytes(state))[1]


@given(some.binary(min_size=1, max_size=60), some.data())
def test_a_state_cut_short_is_no_state_of_before(body: bytes, data: some.DataObject) -> None:
    """Down to nothing at all."""
    state = sealed(body)[: data.draw(some.integers(0, 3))]

    assert unsealed(state) == (b"", False)
