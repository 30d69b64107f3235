"""One entry of the stream as a learner reads it, apart from the store that keeps it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, slots=True)
class Lesson:
    """
    One entry of the stream.

    Args:
        kind: What happened.
        body: Its content; money in nanos.
        at_ms: Service time of the entry, never before that of the entry before it.
    """

    kind: str
    body: Mapping[str, Any]
    at_ms: int = 0
