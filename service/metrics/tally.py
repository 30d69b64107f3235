"""One process's own numbers: added to in place, by name and labels."""

from __future__ import annotations

from array import array
from bisect import bisect_left
from collections.abc import MutableSequence

from service.metrics.series import BOUNDS_S, BUCKETS, DURATION, LABELS, OTHER, PLACES

NANOS = 10**9
_FIRST_BUCKET = PLACES[(DURATION.name, BUCKETS[0])]
_SUM = PLACES[(DURATION.name, "sum")]


class Tally:
    """
    Plain integers; to be changed by one thread only.

    Args:
        words: The row of this process, else numbers that nobody reads.
    """

    __slots__ = ("_words",)

    def __init__(self, words: MutableSequence[int] | memoryview | None = None) -> None:
        self._words = array("q", bytes(8 * len(PLACES))) if words is None else words

    def add(self, name: str, *labels: str, count: int = 1) -> None:
        """Count; a label that the list does not name counts as other."""
        place = PLACES.get((name, *labels))
        # The slow way is only for labels that no list has: a mistake, or a newer release.
        self._words[place if place is not None else _nearest(name, labels)] += count

    def set(self, name: str, *labels: str, value: int) -> None:
        """Say what a gauge stands at, in the whole numbers of its series."""
        place = PLACES.get((name, *labels))
        self._words[place if place is not None else _nearest(name, labels)] = value

    def took(self, seconds: float) -> None:
        """Count one bid by how long it took."""
        self._words[_FIRST_BUCKET + bisect_left(BOUNDS_S, seconds)] += 1
        # Whole nanoseconds, so that rows of many processes add up without rounding.
        self._words[_SUM] += int(seconds * NANOS)

    def value(self, name: str, *labels: str) -> int:
        """What stands there now."""
        return int(self._words[PLACES[(name, *labels)]])


def _nearest(name: str, labels: tuple[str, ...]) -> int:
    """The place of a combination that is not listed: label by label, what is known is kept."""
    known = {key[1:] for key in PLACES if key[0] == name}
    if len(labels) != LABELS[name]:
        raise KeyError(name)
    listed = [{key[i] for key in known} for i in range(len(labels))]
    kept = tuple(one if one in listed[i] else OTHER for i, one in enumerate(labels))
    return PLACES[(name, *kept)]
