"""From a memory to the sums an index reads, apart from the indices: age becomes weight here.

An impression whose window is open counts only as far as its value has had time to come, and
where a line item forgets, an old one counts less. With both, N is a real number.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from service.decision.terms import Terms
from service.learner import delay, drift
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
        columns = _columns(memory)
        known = columns[1] if terms.arrival != ACCRUES else exposure(memory, terms)
        columns = np.vstack([columns[0], known, columns[2:]])
        if terms.drift is not None:
            columns = columns * _weights(memory, columns[0], known, terms)
        return Counts(*(np.asarray(max(one, 0.0)) for one in columns.sum(axis=1)))

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
    law = delay.fit(waiting(memory, terms), DELAY_WEIGHT, assumed_ms, DELAY_HALVINGS)
    return float(1.0 / law.rate)


def waiting(memory: Memory, terms: Terms) -> delay.Seen:
    """The delays that were timed, and the ages in milliseconds of what has brought nothing."""
    ages = np.append(np.minimum(_ages_ms(memory), terms.window_ms), terms.window_ms)
    # Only what has brought nothing is still waited for.
    counts = [max(cell.bought - cell.converted, 0) for cell in memory.cells]
    old = max(memory.base.known - memory.base.converted, 0)
    return delay.seen(memory.delays, memory.delay_sum_ms, ages, [*counts, old])


def exposure(memory: Memory, terms: Terms) -> Numbers:
    """How many impressions of the long ago and of each cell count as known, where values accrue."""
    bought = np.asarray([cell.bought for cell in memory.cells], dtype=np.float64)
    known = np.asarray([cell.known for cell in memory.cells], dtype=np.float64)
    if bought.sum() > 0.0:
        share = delay.arrived_share(_ages_ms(memory), delay_mean_ms(memory, terms), terms.window_ms)
        still_open = np.arange(bought.size) >= memory.closed
        known = np.where(still_open, bought * share, known)
    return np.append(float(memory.base.known), known)


def _columns(memory: Memory) -> Numbers:
    """Rounds, known, converted, amount and its square (rows) of the long ago and each cell."""
    base, cells = memory.base, memory.cells
    long_ago = base.rounds - sum(cell.rounds for cell in cells)
    rows = [
        [long_ago, base.known, base.converted, base.amount, base.amount_square],
        *([c.rounds, c.known, c.converted, c.amount, c.amount_square] for c in cells),
    ]
    return np.asarray(rows, dtype=np.float64).T


def _ages_ms(memory: Memory) -> Numbers:
    """How old the impressions of each cell are: from the middle of the cell."""
    starts = np.asarray([cell.start_ms for cell in memory.cells], dtype=np.float64)
    ends = np.append(starts[1:], float(memory.clock_ms))
    return np.asarray(memory.clock_ms - (starts + ends) / 2.0, dtype=np.float64)


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
