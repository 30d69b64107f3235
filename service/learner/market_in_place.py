"""One more auction counted in the bytes of a market state, apart from reading all of it.

A state holds hundreds of counts, and a lesson or two move one or two of them, mostly where others
were counted before. What is new to a state, or damaged, is left to who reads it whole.
"""

from __future__ import annotations

from service.learner.curve_counts import PARTS
from service.learner.market_state import (
    AUCTIONS,
    COUNT,
    FORM,
    HEAD,
    NAME,
    ROW,
    SOURCE,
    Key,
    MarketState,
)
from service.learner.sealed import sealed, unsealed


class MarketBytes:
    """
    The bytes of a state that is added to.

    Args:
        state: As `MarketState` wrote it, not empty.
    """

    def __init__(self, state: bytes) -> None:
        body, sound = unsealed(state)
        ours = len(body) >= HEAD.size and HEAD.unpack_from(body)[:2] == (NAME, FORM)
        self.sound = sound and ours
        self._body = bytearray(body)

    @property
    def empty(self) -> MarketState:
        """The same state without its counts, which knows the ticks."""
        _, _, *numbers, _ = HEAD.unpack_from(self._body)
        return MarketState(*numbers)

    def count(self, key: Key, place: int, column: int) -> bool:
        """Add one auction; whether there was such a count to add it to."""
        at = self._source(key)
        if at is None:
            return False
        _, _, places = SOURCE.unpack_from(self._body, at)
        at += SOURCE.size + len(key[1].encode())
        for _ in range(places):
            found, mask = ROW.unpack_from(self._body, at)
            if found == place:
                return self._add(at + ROW.size, mask, column)
            at += ROW.size + COUNT.size * mask.bit_count()
        return False

    def to_bytes(self) -> bytes:
        """What `MarketState` would write."""
        return sealed(bytes(self._body))

    def _source(self, key: Key) -> int | None:
        body, at = self._body, HEAD.size
        *_, sources = HEAD.unpack_from(body)
        for _ in range(sources):
            auction, length, places = SOURCE.unpack_from(body, at)
            rows = at + SOURCE.size + length
            if (AUCTIONS[auction], body[rows - length : rows].decode()) == key:
                return at
            for _ in range(places):
                rows += ROW.size + COUNT.size * body[rows + 2].bit_count()
            at = rows
        return None

    def _add(self, at: int, mask: int, column: int) -> bool:
        if not mask >> column & 1:
            return False
        at += COUNT.size * (mask % (1 << column)).bit_count()
        (count,) = COUNT.unpack_from(self._body, at)
        COUNT.pack_into(self._body, at, count + PARTS)
        return True
