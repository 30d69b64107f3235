"""What a line item has learnt, with the newest part of it kept apart by age.

Sums alone cannot tell how old they are. Impressions whose window is still open count only
as far as their values have had time to come, and a market that drifts is forgotten by age;
both need the newest impressions in cells of time, beside the sums of all that is older.
"""

from __future__ import annotations

import json
from base64 import b64decode, b64encode
from dataclasses import dataclass, replace
from operator import attrgetter

import jiter
import orjson

from service.learner.tally import NAMES, Tally
from service.learner.watch import FIRST, Watch

FORM = 2
NOTHING = Tally()


class UnreadableMemory(ValueError):
    """The bytes are not a memory of the form we write."""


@dataclass(frozen=True, slots=True)
class Cell:
    """
    Impressions bought from `start_ms` on, up to the next cell; money in nanos.

    Args:
        start_ms: Service time of the first of them.
        rounds: Rounds counted meanwhile.
        bought: Impressions paid for.
        known: Those whose one value is known; 0 where values accrue.
        converted: Those that have brought something so far.
        amount: What they have brought, each cut at the ceiling.
        amount_square: The same squared, in square nanos.
    """

    start_ms: int
    rounds: int = 0
    bought: int = 0
    known: int = 0
    converted: int = 0
    amount: int = 0
    amount_square: int = 0


@dataclass(frozen=True, slots=True)
class Prior:
    """
    A guess that a lesson brought, in place of the configured one; money in nanos.

    Args:
        per_impression: Value of an impression.
        typical: Usual value of one event.
    """

    per_impression: int
    typical: int


@dataclass(frozen=True, slots=True)
class Memory:
    """
    The state of a learner; integers only, equal in whatever order one moment's lessons come.

    Args:
        base: Every count of the line item, and the values of what is older than all cells.
        cells: The newest impressions, oldest first.
        closed: How many of the cells have closed their windows and are kept for drift.
        clock_ms: Service time of the last lesson, the only clock there is.
        heard_ms: When the last value came, or the first impression; 0 before.
        ripe_ms: The moment at which windows stand still after a silence of the values.
        ripe_again_ms: When they go on.
        began_ms: Values of impressions bought before teach nothing; a restart moves it.
        delays: Impressions whose first value was timed.
        delay_sum_ms: How long they took, in all.
        prior: The guess a lesson brought, if any.
        watch: What the change detector has counted.
        tree: Bytes of the tree of exponential weights, where a method grows one.
        parts: Name and bytes of every part that the configuration wants, by name.
    """

    base: Tally = NOTHING
    cells: tuple[Cell, ...] = ()
    closed: int = 0
    clock_ms: int = 0
    heard_ms: int = 0
    ripe_ms: int = 0
    ripe_again_ms: int = 0
    began_ms: int = 0
    delays: int = 0
    delay_sum_ms: int = 0
    prior: Prior | None = None
    watch: Watch = FIRST
    tree: bytes = b""
    parts: tuple[tuple[str, bytes], ...] = ()

    @staticmethod
    def fresh() -> Memory:
        """The memory before the first lesson."""
        return Memory()

    def part(self, name: str) -> bytes:
        """The state of a part; no bytes where it has none."""
        return dict(self.parts).get(name, b"")

    @property
    def total(self) -> Tally:
        """The sums over everything, cells included; what is open counts as not known."""
        base, cells = self.base, self.cells
        return replace(
            base,
            known=base.known + sum(cell.known for cell in cells),
            converted=base.converted + sum(cell.converted for cell in cells),
            amount=base.amount + sum(cell.amount for cell in cells),
            amount_square=base.amount_square + sum(cell.amount_square for cell in cells),
        )

    def to_bytes(self) -> bytes:
        """Canonical JSON: equal memories give equal bytes."""
        content = {
            "form": FORM,
            "base": _BASE(self.base),
            "cells": [*map(_CELL, self.cells)],
            "prior": [self.prior.per_impression, self.prior.typical] if self.prior else [],
            "watch": list(self.watch),
            "tree": _packed(self.tree),
            "parts": {name: _packed(state) for name, state in self.parts},
            **dict(zip(_NUMBERS, _OWN(self), strict=True)),
        }
        try:
            return orjson.dumps(content, option=orjson.OPT_SORT_KEYS)
        # It takes no whole number beyond 64 bits, and sums of squares grow beyond.
        except TypeError:
            return json.dumps(content, sort_keys=True, separators=(",", ":")).encode()

    @staticmethod
    def from_bytes(state: bytes) -> Memory:
        """
        Read what `to_bytes` wrote.

        Raises:
            UnreadableMemory: Not JSON, another form, or not exactly our integers.
        """
        try:
            content = jiter.from_json(state)
            form = content.pop("form", None) if isinstance(content, dict) else None
            if form != FORM or content.keys() != _MEMBERS:
                raise UnreadableMemory("not the form of memory this release writes")
            return _read(content)
        # A ValueError too, but it says more than the one below would.
        except UnreadableMemory:
            raise
        except (ValueError, TypeError) as error:
            raise UnreadableMemory("not a memory") from error


_NUMBERS = (
    *("closed", "clock_ms", "heard_ms", "ripe_ms", "ripe_again_ms", "began_ms"),
    *("delays", "delay_sum_ms"),
)
_PARTS = ("base", "cells", "prior", "watch", "tree", "parts")
_ONLY_INTEGERS = frozenset((int,))
_MEMBERS = {*_NUMBERS, *_PARTS}
_BASE, _CELL, _OWN = attrgetter(*NAMES), attrgetter(*Cell.__slots__), attrgetter(*_NUMBERS)


def _read(content: dict[str, object]) -> Memory:
    base, cells, prior, watch, tree, parts = (content[name] for name in _PARTS)
    if not isinstance(parts, dict) or not isinstance(cells, list):
        raise UnreadableMemory("not a memory")
    numbers = dict(zip(_NUMBERS, _whole([content[name] for name in _NUMBERS], 8), strict=True))
    read = tuple(Cell(*_whole(cell, len(Cell.__slots__))) for cell in cells)
    starts = [cell.start_ms for cell in read]
    if not 0 <= numbers["closed"] <= len(read) or starts != sorted(starts):
        raise UnreadableMemory("cells out of order")
    return Memory(
        base=Tally(*_whole(base, len(NAMES))),
        cells=read,
        prior=Prior(*_whole(prior, 2)) if prior else None,
        watch=Watch(*_whole(watch, len(FIRST))),
        tree=_unpacked(tree),
        parts=tuple((str(name), _unpacked(parts[name])) for name in sorted(parts)),
        **numbers,
    )


def _packed(state: bytes) -> str:
    return b64encode(state).decode("ascii")


def _unpacked(text: object) -> bytes:
    if not isinstance(text, str):
        raise UnreadableMemory("a state that is no text")
    return b64decode(text, validate=True)


def _whole(numbers: object, count: int) -> list[int]:
    if not isinstance(numbers, list) or len(numbers) != count:
        raise UnreadableMemory("a part has another length")
    # To isinstance True is an int too, and no count of ours.
    if not _ONLY_INTEGERS.issuperset(map(type, numbers)):
        raise UnreadableMemory("a memory holds integers only")
    return numbers
