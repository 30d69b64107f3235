"""An invented week of decisions and wins, put straight into a store, apart from who reads it.

A week of real traffic cannot be waited for; the rows are those that a worker would have logged.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np

from service.api.forms.configs import read_new
from service.configuring import filled
from service.guard.ticket import ref_of
from service.ledger.accounts import Movement
from service.ledger.entries import Entry
from service.store import charting, decisions, learners, line_items
from service.store.books import Books
from service.store.database import Database, Writing
from service.teaching import FRESH

LINE_ITEM, OTHER = "orchard", "hedge"
DAY_MS = 86_400_000
DAYS = 7
BATCH_MAX = 10_000
BATCHES = 100  # At least: wins of one batch share a moment.
OF_ORCHARD = 0.9  # Of all decisions; the rest are another line item's, between them.
BIDS, WINS = 0.7, 0.05  # Of the decisions, and of the bids.
REASONS = ("under_floor", "day_spent", "out_of_flight", "no_value")
SET_BY = ("value", "cap", "pacing")
SOURCES = ("north", "south", "east", "west")

Advance = Callable[[int], object]


def plant(database: Database, begin_ms: int) -> None:
    """Make both line items, as of the beginning of the week."""
    for name in (LINE_ITEM, OTHER):
        body: dict[str, object] = {"id": name, "name": name, "currency": "EUR"}
        body |= {"budget": "1000000.00", "bid_cap_cpm": 20, "value": {"ceiling": "0.10"}}
        config, _ = read_new(body, begin_ms - begin_ms % DAY_MS)
        full, _ = filled(config)
        database.write(partial(_begin, full, begin_ms))


def fill(database: Database, rows: int, seed: int, begin_ms: int, advance: Advance) -> int:
    """
    Log so many decisions over a week and settle the wins among them.

    Args:
        advance: Told how many decisions were just logged.

    Returns:
        How many decisions are the orchard's.
    """
    random, mine = np.random.default_rng(seed), 0
    step_ms, size = DAYS * DAY_MS / rows, max(1, min(BATCH_MAX, rows // BATCHES))
    for first in range(0, rows, size):
        count = min(size, rows - first)
        batch = _batch(random, count, begin_ms + first * step_ms, step_ms)
        decisions.log(database, batch)
        kept = [row for row in batch if row["line_item"] == LINE_ITEM]
        mine += len(kept)
        _settle(database, random, kept)
        advance(count)
    while charting.roll(database):
        pass
    return mine


def _begin(config: dict[str, Any], begin_ms: int, connection: Writing) -> None:
    line_items.create(connection, config, begin_ms)
    learners.begin(connection, config["id"], FRESH, begin_ms)


def _batch(
    random: np.random.Generator, count: int, begin_ms: float, step_ms: float
) -> list[dict[str, Any]]:
    """Decisions one after the other; prices are lognormal, as bids for many things are."""
    mine, bids = random.random(count) < OF_ORCHARD, random.random(count) < BIDS
    prices = np.minimum(2e7, random.lognormal(14.0, 0.5, count)).astype(int).tolist()
    sources, why = random.integers(0, 4, count).tolist(), random.integers(0, 4, count).tolist()
    by = random.choice(3, count, p=(0.8, 0.05, 0.15)).tolist()
    names = random.bytes(16 * count)
    return [
        {
            "at_ms": int(begin_ms + n * step_ms),
            "line_item": LINE_ITEM if mine[n] else OTHER,
            "ref": ref_of(names[16 * n : 16 * n + 16]) if bids[n] else None,
            "request_id": f"op-{n}",
            "source": SOURCES[sources[n]],
            "floor": 400_000,
            "price": prices[n] if bids[n] else None,
            "reason": None if bids[n] else REASONS[why[n]],
            "set_by": SET_BY[by[n]] if bids[n] else None,
            "snapshot": 0,
            "test": 0,
        }
        for n in range(count)
    ]


def _settle(database: Database, random: np.random.Generator, batch: list[dict[str, Any]]) -> None:
    """Book some of the bids as wins whose grace was over, so that no slice need be made up."""
    bids = [row for row in batch if row["price"] is not None]
    won = [row for row, drawn in zip(bids, random.random(len(bids)), strict=True) if drawn < WINS]
    shares, names = random.uniform(0.5, 1.0, len(won)).tolist(), random.bytes(16 * len(won))
    if not won:
        return

    def work(connection: Writing) -> None:
        books = Books(connection, [LINE_ITEM], won[0]["at_ms"])
        for place, row in enumerate(won):
            price = int(row["price"] * shares[place])
            bid = names[16 * place : 16 * place + 16]
            books.post(LINE_ITEM, _win(row, bid, price), Movement(spent=price))
        books.save()

    database.write(work)


def _win(row: dict[str, Any], bid: bytes, price: int) -> Entry:
    body = {
        **{"said": "won", "price": price, "to_win": None, "bid": row["price"], "counter": 0},
        **{"source": row["source"], "auction": "second", "why": None, "at": None},
        **{"round": 1, "late": True, "owed": 0, "slice": None, "day": None},
    }
    return Entry("won", body, bid, "result", price)
