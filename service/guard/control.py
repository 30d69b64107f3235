"""Which opportunities are bid for by the plain rule of a control share, and with what money.

Apart from the price itself. The choice hangs on a keyed hash of the request's name alone, so it
is as good as drawn, and the same request is never in two arms. The money of the arm is guarded
twice: here by what this worker has leased, and in `open` by what the arm has spent of the budget.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from hashlib import blake2b
from typing import Any

MAIN, CONTROL = "", "control"
WHOLE = 10**9
_PERSON = b"bidkeel-control"
_HASH_BYTES = 8


@dataclass(frozen=True, slots=True)
class Control:
    """
    The plain rule of a control share.

    Args:
        share: Of traffic, and of money at most, in parts of 10^9.
        price: What it bids, in nanos per impression, fees included.
    """

    share: int
    price: int

    @staticmethod
    def of(said: Mapping[str, Any] | None) -> Control | None:
        """That of a configuration, if it has one."""
        return None if said is None else Control(said["share"], said["price"])

    @property
    def fraction(self) -> float:
        """The share as a fraction."""
        return self.share / WHOLE

    def chooses(self, line_item: str, unit: str, key: bytes) -> bool:
        """
        Whether this unit belongs to the arm.

        Args:
            line_item: Two line items choose apart from one another.
            unit: The request's own name.
            key: Secret of the database, so that no caller can choose an arm.
        """
        # Keyed, or a caller could pick names that land in the arm it likes.
        digest = blake2b(
            f"{line_item}\n{unit}".encode(), key=key[:64], digest_size=_HASH_BYTES, person=_PERSON
        ).digest()
        # In whole numbers, so that every machine draws the line at the same hash.
        return int.from_bytes(digest) * WHOLE < self.share << (8 * _HASH_BYTES)

    def has_room(self, leased: int, issued: int) -> bool:
        """
        Whether the arm may bid once more.

        Args:
            leased: What this worker has issued of earlier slices and holds in this one, in nanos.
            issued: What of it the arm has issued.
        """
        # With the bid itself counted in, or the last one would overshoot the share.
        return (issued + self.price) * WHOLE <= self.share * leased

    def open(self, budget: int, spent: int) -> bool:
        """Whether the arm may go on, by what it has spent of the budget, in nanos."""
        return (spent + self.price) * WHOLE <= self.share * budget
