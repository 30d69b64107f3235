"""One entry of the stream as a learner reads it, apart from the store that keeps it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

SPENT = "spent"


class Lesson(NamedTuple):
    """
    One entry of the stream.

    Args:
        kind: What happened.
        body: Its content; money in nanos.
        at_ms: Service time of the entry, never before that of the entry before it.
        wall_ms: The same on the wall clock, for what goes by days; as little going back.
        cost: Nanos that it turned into cost. Money is spent whatever is retracted: of an entry
            that teaches no more this is left, under the kind `SPENT`.
    """

    kind: str
    body: Mapping[str, Any]
    at_ms: int = 0
    wall_ms: int = 0
    cost: int = 0
