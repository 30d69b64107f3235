"""What a line item has learnt, as integer sums, apart from how entries become sums."""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass, fields

FORM = 1


class UnreadableTally(ValueError):
    """The bytes are not a tally of the form we write."""


@dataclass(frozen=True, slots=True)
class Tally:
    """
    Sums over the entries of a stream since the last reset; money in nanos.

    Integers only, so the sums are equal in any order and from any process. A sum over part
    of a stream may be negative, because a correction can stand in another part.

    Args:
        rounds: Opportunities priced that are known to be over, passes under the floor included.
        under_floor: Those of the rounds that passed under the floor.
        wins: Impressions bought.
        late: Those of the wins that were reported after their grace.
        losses: Bids beaten on price.
        voids: Bids that failed for other reasons and teach nothing.
        paid: Sum of prices paid.
        known: Wins whose value is known; they alone make the mean.
        converted: Known wins worth more than nothing.
        amount: Sum of known values, each cut at the ceiling.
        amount_square: Sum of their squares, in square nanos.
        clipped: Known values that were cut at the ceiling.
        values_seen: Value reports, corrections not counted.
    """

    rounds: int = 0
    under_floor: int = 0
    wins: int = 0
    late: int = 0
    losses: int = 0
    voids: int = 0
    paid: int = 0
    known: int = 0
    converted: int = 0
    amount: int = 0
    amount_square: int = 0
    clipped: int = 0
    values_seen: int = 0

    @staticmethod
    def fresh() -> Tally:
        """The tally before the first lesson."""
        return Tally()

    def merge(self, other: Tally) -> Tally:
        """The tally of both parts of a stream together; neither part may hold a reset."""
        return Tally(*(getattr(self, name) + getattr(other, name) for name in NAMES))

    def to_bytes(self) -> bytes:
        """Canonical JSON: equal tallies give equal bytes."""
        return json.dumps(
            {"form": FORM, **asdict(self)}, sort_keys=True, separators=(",", ":")
        ).encode()

    @staticmethod
    def from_bytes(state: bytes) -> Tally:
        """
        Read what `to_bytes` wrote.

        Raises:
            UnreadableTally: Not JSON, another form, or not exactly our integers.
        """
        content = _content(state)
        if content.pop("form", None) != FORM or set(content) != set(NAMES):
            raise UnreadableTally("not the form of tally this release writes")
        if any(type(number) is not int for number in content.values()):
            raise UnreadableTally("a tally holds integers only")
        return Tally(**content)


NAMES = tuple(field.name for field in fields(Tally))


def _content(state: bytes) -> dict[str, int]:
    try:
        content = json.loads(state)
    except ValueError as error:
        raise UnreadableTally("not JSON") from error
    if not isinstance(content, dict):
        raise UnreadableTally("not an object")
    return content
