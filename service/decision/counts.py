"""From a memory to the sums an index reads, apart from the indices: age becomes weight here.

An impression whose window is open counts only as far as its value has had time to come, and
where a line item forgets, an old one counts less. With both, N is a real number.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from service.decision.terms import Terms
from service.learner import delay, delay_single, drift
from service.learner.arrays import Numbers, double
from service.learner.memory import Memory
from service.learner.rules import ACCRUES, DISCOUNT, KEPT

DELAY_WEIGHT = 1.0  # What the assumed mean delay weighs, in conversions.
DELAY_HALVINGS = 12  # To a part in ten thousand, in a few milliseconds.
DELAY_SHARE = 4  # The assumed mean delay is this part of the window.


@dataclass(frozen=True, slots=True)
class Counts:
    """
    The sums an index reads: one number each, or one array each over many runs.

    Args:
        rounds: Rounds played.
        known: Impressions paid for, each as far as its value is known.
        converted: Those worth more than nothing.
        amount: Sum of known values, in nanos.
        amount_square: Sum of their squares, in square nanos.
    """

    rounds: Numbers
    known: Numbers
    converted: Numbers
    amount: Numbers
    amount_square: Numbers

    @staticmethod
    def of(memory: Memory, terms: Terms) -> Counts:
        """
        The counts of one memory.

        A correction that comes after a reset for a value from before it leaves a sum below
        zero; no index is defined there, so it counts as zero.
        """
        rows = _rows(memory)
        if terms.arrival == ACCRUES:
            known = _exposed(memory, terms)
            rows = [(row[0], one, *row[2:]) for row, one in zip(rows, known, strict=True)]
        cells = np.asarray(rows, dtype=np.float64)
        if terms.drift is not None:
            cells *= _weights(memory, cells[:, 0], cells[:, 1], terms)[:, np.newaxis]
        # Taken one by one they are plain numbers of numpy, which count ten times as fast.
        return Counts(*np.maximum(cells.sum(axis=0), 0.0))

    @property
    def all(self) -> tuple[Numbers, ...]:
        """The sums in the order of the arguments."""
        return self.rounds, self.known, self.converted, self.amount, self.amount_square

    @property
    def round_next(self) -> Numbers:
        """
        The round to be bid in, from 1.

        After a reset, values of earlier wins may come before any round; an index must not
        take them for more than one round each can explain.
        """
        return np.asarray(np.maximum(self.rounds, self.known) + 1.0, dtype=np.float64)

    def mean_share(self, terms: Terms) -> Numbers:
        """Mean of the known values as a share of the scale; 0 while none is known."""
        # With part of one impression known, its value must not count many times over.
        share = self.amount / (np.maximum(self.known, 1.0) * terms.scale)
        return np.asarray(np.minimum(share, 1.0), dtype=np.float64)

    def variance_share(self, terms: Terms) -> Numbers:
        """Variance of the known values, divided by N, as a share of the square of the scale."""
        some = np.maximum(self.known, 1.0)
        mean = self.amount / some / terms.scale
        square = self.amount_square / some / terms.scale / terms.scale
        return np.asarray(np.maximum(square - mean * mean, 0.0), dtype=np.float64)


def nothing(runs: int | None = None) -> Counts:
    """The counts before the first lesson, of one run or of many."""
    zero = np.asarray(0.0) if runs is None else np.zeros(runs)
    return Counts(zero, zero, zero, zero, zero)


def delay_mean_ms(memory: Memory, terms: Terms) -> float:
    """The mean delay of values: as configured, else fitted to what came and what is awaited."""
    if terms.delay_mean_ms is not None:
        return float(terms.delay_mean_ms)
    assumed_ms = terms.window_ms / DELAY_SHARE
    # While nothing was timed all that is known of delays is what is assumed.
    rate = DELAY_WEIGHT / (DELAY_WEIGHT * assumed_ms)
    if memory.delays > 0:
        rate = _fitted(memory, terms, assumed_ms)
    return 1.0 / rate


def _fitted(memory: Memory, terms: Terms, assumed_ms: float) -> float:
    ages, counts = _silent(memory, terms)
    buckets = tuple((age, count) for age, count in zip(ages, counts, strict=True) if count)
    timed = delay_single.Waiting(memory.delays, memory.delay_sum_ms, buckets, max(ages))
    rate = _rate_of(timed, assumed_ms)
    if rate is not None:
        return rate
    law = delay.fit(waiting(memory, terms), DELAY_WEIGHT, assumed_ms, DELAY_HALVINGS)
    return float(law.rate)


# A method that reads features asks twice of the same snapshot, and so does a page beside a bid.
@lru_cache(maxsize=256)
def _rate_of(timed: delay_single.Waiting, assumed_ms: float) -> float | None:
    return delay_single.rate_of(timed, DELAY_WEIGHT, assumed_ms, DELAY_HALVINGS)


def waiting(memory: Memory, terms: Terms) -> delay.Seen:
    """The delays that were timed, and the ages in milliseconds of what has brought nothing."""
    return delay.seen(memory.delays, memory.delay_sum_ms, *_silent(memory, terms))


def _silent(memory: Memory, terms: Terms) -> tuple[list[float], list[int]]:
    """Ages and numbers of the impressions that have brought nothing, cell by cell."""
    window_ms = float(terms.window_ms)
    ages = [min(age, window_ms) for age in _ages_ms(memory)]
    # Only what has brought nothing is still waited for.
    counts = [max(cell.bought - cell.converted, 0) for cell in memory.cells]
    old = max(memory.base.known - memory.base.converted, 0)
    return [*ages, window_ms], [*counts, old]


def exposure(memory: Memory, terms: Terms) -> Numbers:
    """How many impressions of the long ago and of each cell count as known, where values accrue."""
    return double(_exposed(memory, terms))


def _exposed(memory: Memory, terms: Terms) -> list[float]:
    cells, closed = memory.cells, memory.closed
    known = [float(memory.base.known), *[float(cell.known) for cell in cells]]
    bought = [cell.bought for cell in cells[closed:]]
    # Where nothing is open nothing hangs on how long values take, and that is dear to know.
    if any(bought):
        mean_ms = delay_mean_ms(memory, terms)
        share = delay.arrived_share(_ages_ms(memory)[closed:], mean_ms, terms.window_ms)
        known[1 + closed :] = (share * bought).tolist()
    elif any(cell.bought for cell in cells):
        known[1 + closed :] = [0.0] * len(bought)
    return known


def _rows(memory: Memory) -> list[tuple[float, ...]]:
    """Rounds, known, converted, amount and its square of the long ago and of each cell."""
    base, cells = memory.base, memory.cells
    long_ago = base.rounds - sum(cell.rounds for cell in cells)
    return [
        (long_ago, base.known, base.converted, base.amount, base.amount_square),
        *[(c.rounds, c.known, c.converted, c.amount, c.amount_square) for c in cells],
    ]


def _ages_ms(memory: Memory) -> list[float]:
    """How old the impressions of each cell are: from the middle of the cell."""
    clock_ms = memory.clock_ms
    starts = [cell.start_ms for cell in memory.cells]
    return [
        clock_ms - (start + end) / 2.0
        for start, end in zip(starts, [*starts[1:], clock_ms], strict=bool(starts))
    ]


def _weights(memory: Memory, rounds: Numbers, known: Numbers, terms: Terms) -> Numbers:
    forget = terms.drift
    if forget is None:
        return np.ones_like(known)
    if forget.by == "rounds":
        after = np.cumsum(rounds[::-1])[::-1] - rounds
        ages = after + rounds / 2.0
    else:
        ages = np.append(np.inf, _ages_ms(memory))
    # What is older than all cells is beyond the horizon, however few rounds it covers.
    ages[0] = np.inf
    kind: drift.Kind = "effective" if forget.how == DISCOUNT else "window"
    decayed = drift.weights(ages, forget.size, kind)
    newer = np.cumsum(known[::-1])[::-1] - known
    some = np.where(known > 0.0, known, 1.0)
    return double(np.maximum(decayed, np.clip((KEPT - newer) / some, 0.0, 1.0)))
