"""What a learner knew at earlier moments: kept checkpoints, and the newest part folded in steps."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from service.decision.describing import describe
from service.decision.price import ready
from service.decision.terms import Terms
from service.learner.memory import Memory, UnreadableMemory
from service.store import rebuilds, watching_series
from service.store.database import Reading
from service.teaching import FRESH, lesson

STEPS = 12
# Steps begin so far back at least, or just after a checkpoint there would be none.
TAIL_MIN = 5000
# And so far back at most: ten thousand entries lie between two checkpoints, unless set otherwise.
TAIL_MAX = 15_000


@dataclass(frozen=True, slots=True)
class Estimate:
    """What an impression was believed to be worth at a moment, in nanos, with its interval."""

    at_ms: int
    mean: int | None
    low: int
    high: int


def estimates(connection: Reading, line_item: str, config: Mapping[str, Any]) -> list[Estimate]:
    """The estimate at each kept checkpoint and at some moments since, oldest first."""
    terms = Terms.from_config(dict(config))
    kept = watching_series.checkpoints(connection, line_item)
    head = rebuilds.standing(connection, line_item).seq
    start = rebuilds.nearest(connection, line_item, max(0, head - TAIL_MIN), FRESH)
    stepped = head - start.seq <= TAIL_MAX
    found = [
        _estimate(state, at_ms, terms)
        for seq, state, at_ms in kept
        if seq <= start.seq or not stepped
    ]
    # Without checkpoints near enough the steps would take longer than anybody waits.
    if not stepped:
        return [one for one in found if one is not None]
    seqs = sorted({start.seq + (head - start.seq) * step // STEPS for step in range(1, STEPS + 1)})
    seqs = [seq for seq in seqs if seq > start.seq]
    at = watching_series.moments(connection, line_item, seqs)
    for seq, at_ms in zip(seqs, at, strict=True):
        state = rebuilds.fold_until(connection, line_item, start, seq, lesson)
        start = rebuilds.Start(seq, state)
        found.append(_estimate(state, at_ms, terms))
    return [one for one in found if one is not None]


def _estimate(state: bytes, at_ms: int, terms: Terms) -> Estimate | None:
    try:
        told = describe(ready(Memory.from_bytes(state), terms))
    # A checkpoint of another release is refolded when it is needed, and not for a chart.
    except UnreadableMemory:
        return None
    mean, low, high = (told[f"{name}_nanos"] for name in ("mean", "low", "high"))
    if not isinstance(low, int) or not isinstance(high, int):
        return None
    return Estimate(at_ms, mean if isinstance(mean, int) else None, low, high)
