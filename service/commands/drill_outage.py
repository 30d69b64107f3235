"""`bidkeel drill outage`: how long a bid takes while the database is stopped, beside when it is up.

The load is open: a bid is due at its moment whether or not the one before was answered, and
its time counts from that moment, so that a stall is not hidden by the wait for it.
"""

from __future__ import annotations

import argparse
import asyncio
import json
import signal
import sys
import tempfile
import time
from collections import Counter
from dataclasses import asdict, dataclass, field
from pathlib import Path

import numpy as np
import uvloop

from service.commands import caller, options
from service.commands.postgresql_process import PostgreSQLProcess
from service.commands.server_process import ServerProcess
from service.commands.wire import Wire

LINE_ITEM = "outage"
WARM_UP_S = 4
LEASE_S = 60  # Longer than the outage, so that a full slice rides it out.
MS = 1000


@dataclass(slots=True)
class Latencies:
    """Milliseconds from the moment a bid was due to its answer, and what the answers were."""

    ms: list[float] = field(default_factory=list)
    answers: Counter[str] = field(default_factory=Counter)

    def quantile(self, share: float) -> float:
        """The time that such a share of bids stayed within."""
        return round(float(np.quantile(self.ms, share)), 2) if self.ms else 0.0


@dataclass(frozen=True, slots=True)
class Figures:
    """One line of the table."""

    database: str
    bids: int
    priced: int
    passed: int
    failed: int
    p50_ms: float
    p99_ms: float


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seconds", type=options.count, default=10, help="of each phase")
    parser.add_argument("--rate", type=options.count, default=100, help="bids a second")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Run the drill on a PostgreSQL of its own.

    Returns:
        0 when every bid was answered and prices left throughout, else 3.
    """
    # Told to end, end like on Ctrl-C, so that no server outlives the drill.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    with tempfile.TemporaryDirectory(prefix="bidkeel-drill-") as folder:
        with PostgreSQLProcess() as postgresql:
            settings = {
                "BIDKEEL_DATABASE_URL": postgresql.url,
                "BIDKEEL_LEASE_S": str(LEASE_S),
                "BIDKEEL_DEADLINE_MS": "200",
            }
            with ServerProcess(Path(folder), settings) as server:
                figures = uvloop.run(_drill(arguments, server, postgresql))
    if arguments.json:
        sys.stdout.write(json.dumps([asdict(one) for one in figures]) + "\n")
    else:
        for one in figures:
            sys.stdout.write(f"{asdict(one)}\n")
    return 3 if any(one.failed or not one.priced for one in figures) else 0


async def _drill(
    arguments: argparse.Namespace, server: ServerProcess, postgresql: PostgreSQLProcess
) -> list[Figures]:
    async with server.wire() as wire:
        await caller.create(wire, _line_item(arguments.rate * arguments.seconds))
        await _load(wire, arguments.rate, WARM_UP_S)
        up = await _load(wire, arguments.rate, arguments.seconds)
        await asyncio.to_thread(postgresql.stop, "fast")
        away = await _load(wire, arguments.rate, arguments.seconds)
        await asyncio.to_thread(postgresql.start)
        await asyncio.sleep(WARM_UP_S)
        again = await _load(wire, arguments.rate, arguments.seconds)
    named = (("up", up), ("stopped", away), ("up again", again))
    return [_figures(name, load) for name, load in named]


async def _load(wire: Wire, rate: int, seconds: float) -> Latencies:
    seen, started = Latencies(), time.monotonic()
    async with asyncio.TaskGroup() as group:
        for number in range(int(rate * seconds)):
            due = started + number / rate
            await asyncio.sleep(max(0.0, due - time.monotonic()))
            group.create_task(_bid(wire, due, seen))
    return seen


async def _bid(wire: Wire, due: float, seen: Latencies) -> None:
    try:
        reply = await wire.post("/v1/bids", {"line_item": LINE_ITEM})
    except (OSError, TimeoutError) as error:
        seen.answers[type(error).__name__] += 1
        return
    seen.ms.append((time.monotonic() - due) * MS)
    if reply.status == 200:
        seen.answers["passed" if json.loads(reply.content)["pass"] else "priced"] += 1
    else:
        seen.answers[str(reply.status)] += 1


def _figures(name: str, seen: Latencies) -> Figures:
    priced, passed = seen.answers["priced"], seen.answers["passed"]
    failed = seen.answers.total() - priced - passed
    p50, p99 = seen.quantile(0.5), seen.quantile(0.99)
    return Figures(name, seen.answers.total(), priced, passed, failed, p50, p99)


def _line_item(bids: int) -> dict[str, object]:
    """A fixed price and so much money that no slice is small."""
    return {
        "id": LINE_ITEM,
        "name": "Outage",
        "currency": "EUR",
        "budget": f"{bids * 2}",
        "bid_cap_cpm": 8,
        "policy": {"method": "flat", "price_cpm": 2},
    }
