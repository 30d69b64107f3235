"""Late values in money: four ways to count impressions whose values are still on their way.

Fourteen days of the rare market of 0.1 % x 2 EUR under `posterior-quantile`, a window of seven
days, delays exponential with mean one and a half days among those that come within it. All
lessons go through the fold of production; only what is read off its memory differs.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service import money
from service.decision.counts import Counts
from service.decision.terms import Terms
from service.learner.fold import Lesson, fold
from service.learner.memory import Memory
from service.learner.rules import Rules
from service.rehearsal.market import Nanos
from service.rehearsal.rare import RIVALS, SMALL, rare_terms
from service.rehearsal.run import bids_of

DAY_MS = 86_400_000
DAYS, WINDOW_MS, DELAY_MEAN_MS = 14, 7 * DAY_MS, 3 * DAY_MS // 2
BLOCK_MS = DAY_MS // 96  # A new price every quarter of an hour.
METHOD = "posterior-quantile"

ORACLE = "oracle (knows the mean value)"
AT_ONCE = "values told at once"
MATURED = "closed windows only"
NAIVE = "every open impression in full"
KNOWN_LAW = "corrected, law of delays known"
FITTED = "corrected, law fitted"
WAYS = (ORACLE, AT_ONCE, MATURED, NAIVE, KNOWN_LAW, FITTED)

Read = Callable[[Memory, Terms], Counts]


@dataclass(frozen=True, slots=True)
class Stretch:
    """One realised fortnight: when what came up at which price, and what it brought when."""

    at_ms: NDArray[np.int64]
    competing: Nanos
    hits: NDArray[np.bool_]
    delays_ms: NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Job:
    """One fortnight under one way of counting; picklable, for a process of its own."""

    way: str
    opportunities: int
    seed: int


def stretch(rng: Generator, opportunities: int) -> Stretch:
    """Opportunities come evenly; every delay is cut by the window, not dropped beyond it."""
    at_ms = np.arange(1, opportunities + 1) * (DAYS * DAY_MS) // (opportunities + 1)
    competing = RIVALS.draw(rng, opportunities)
    hits = SMALL.values.draw(rng, opportunities) > 0
    within = -np.expm1(-WINDOW_MS / DELAY_MEAN_MS)
    # The inverse of the law of delays, given that they end within the window.
    delays_ms = -DELAY_MEAN_MS * np.log1p(-within * rng.random(opportunities))
    return Stretch(at_ms, competing, hits, np.ceil(delays_ms).astype(np.int64))


def played(job: Job) -> int:
    """The surplus of one fortnight in nanos, what is won counted at its mean value."""
    market = stretch(np.random.default_rng([job.seed, job.opportunities]), job.opportunities)
    if job.way == ORACLE:
        won = market.competing <= SMALL.worth
    else:
        if job.way == AT_ONCE:
            market = replace(market, delays_ms=np.zeros_like(market.delays_ms))
        won = _won(market, terms_of(job.way), READS.get(job.way, Counts.of))
    return int(np.where(won, SMALL.worth - market.competing, 0).sum())


def terms_of(way: str) -> Terms:
    """The line item: the law of delays is told where the way says that it is known."""
    # A law needs a mean above nothing, so what is told at once has that of a millisecond.
    known = {KNOWN_LAW: DELAY_MEAN_MS, AT_ONCE: 1}.get(way)
    return replace(rare_terms(METHOD, SMALL), window_ms=WINDOW_MS, delay_mean_ms=known)


def matured(memory: Memory, terms: Terms) -> Counts:
    """Impressions with closed windows, and what those brought."""
    base = memory.base
    sums = (base.rounds, base.known, base.converted, base.amount, base.amount_square)
    return Counts(*(np.asarray(float(one)) for one in sums))


def naive(memory: Memory, terms: Terms) -> Counts:
    """Every impression in full from the moment it is bought, and what came so far."""
    total = memory.total
    bought = memory.base.known + sum(cell.bought for cell in memory.cells)
    sums = (total.rounds, bought, total.converted, total.amount, total.amount_square)
    return Counts(*(np.asarray(float(one)) for one in sums))


READS: dict[str, Read] = {MATURED: matured, NAIVE: naive}


def price(memory: Memory, terms: Terms, read: Read) -> int:
    """The bid in nanos on what is read off a memory, by the formula of production."""
    counts = Counts(*(np.reshape(one, 1) for one in read(memory, terms).all))
    return int(bids_of(counts, terms)[0, 0])


def _won(market: Stretch, terms: Terms, read: Read) -> NDArray[np.bool_]:
    rules = Rules(terms.ceiling, terms.arrival, WINDOW_MS)
    memory, due = Memory.fresh(), defaultdict[int, list[Lesson]](list)
    won = np.zeros(market.at_ms.size, np.bool_)
    blocks = DAYS * DAY_MS // BLOCK_MS
    edges = np.searchsorted(market.at_ms, np.arange(blocks + 1) * BLOCK_MS).tolist()
    for block in range(blocks):
        these = slice(edges[block], edges[block + 1])
        won[these] = market.competing[these] <= price(memory, terms, read)
        lessons = due.pop(block, []) + _lessons(market, these, won[these])
        _put_values(market, these, won[these], due, lessons)
        end_ms = (block + 1) * BLOCK_MS
        # Losses are told in one tick, since they say nothing of values.
        lost = int((~won[these]).sum())
        lessons.append(Lesson("tick", {"rounds": lost, "under_floor": 0}, end_ms))
        # Values of earlier wins lie between the new wins, and a fold only moves forward in time.
        memory = fold(memory, sorted(lessons, key=lambda lesson: lesson.at_ms), rules)
    return won


def _lessons(market: Stretch, these: slice, won: NDArray[np.bool_]) -> list[Lesson]:
    prices, stamps = market.competing[these][won], market.at_ms[these][won]
    return [
        Lesson("won", {"price": price, "round": 1}, at_ms)
        for price, at_ms in zip(prices.tolist(), stamps.tolist(), strict=True)
    ]


def _put_values(
    market: Stretch,
    these: slice,
    won: NDArray[np.bool_],
    due: dict[int, list[Lesson]],
    now: list[Lesson],
) -> None:
    come = won & market.hits[these]
    bought, late = market.at_ms[these][come], market.delays_ms[these][come]
    for won_ms, delay_ms in zip(bought.tolist(), late.tolist(), strict=True):
        body = {"amount": SMALL.typical, "was": None, "won_ms": won_ms}
        lesson = Lesson("value", body, won_ms + delay_ms)
        block = lesson.at_ms // BLOCK_MS
        (now if block == (won_ms // BLOCK_MS) else due[block]).append(lesson)


def units(nanos: list[int]) -> tuple[float, float]:
    """Mean and its standard error, in currency units."""
    each = np.asarray(nanos) / money.NANOS_PER_UNIT
    error = float(each.std(ddof=1) / np.sqrt(each.size)) if each.size > 1 else float("nan")
    return float(each.mean()), error
