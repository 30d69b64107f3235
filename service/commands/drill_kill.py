"""`bidkeel drill kill`: a black-box run in which workers and database are killed, judged after.

Market and faults come from one seed; what meets what depends on the machine.
"""

from __future__ import annotations

import argparse
import asyncio
import json
import signal
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import AsyncExitStack, ExitStack, contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
import uvloop

from service import money
from service.commands import caller, options, report
from service.commands.drill_nemesis import Fleet, Nemesis, running
from service.commands.drill_traffic import Traffic
from service.commands.drill_verdict import held, judge, recovery_s
from service.commands.exchange import Auction
from service.commands.postgresql_process import PostgreSQLProcess
from service.store.audit import unfunded
from service.store.database import Database

LEASE_S = 2
GRACE_S = 15
AFTER_S_MAX = 90.0
PRICE_CPM = 4
RIVAL_MEDIAN_CPM = 3.0
RIVAL_SIGMA = 0.6
TIGHT, WIDE = "tight", "wide"
CHARGE_CPM = 1.7  # What such an auction costs on average, won or not; sizes the tight budget.


@dataclass(frozen=True, slots=True)
class Figures:
    """What a drill found."""

    database: str
    workers: int
    seconds: float
    faults: dict[str, int]
    calls: dict[str, int]
    passes: dict[str, int]
    outcomes: int
    acknowledged: int
    unknown: int
    charged: str
    unfunded: str
    reads: int
    delay_s_max: float
    recovery_s_max: float
    held_end: str
    violations: list[str]


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    kinds = ("sqlite", "postgresql")
    parser.add_argument("--database", choices=kinds, default="postgresql", help="which one")
    parser.add_argument("--workers", type=options.count, default=3, help="1 on sqlite")
    parser.add_argument("--kills", type=options.count, default=20, help="at least so many")
    parser.add_argument("--seconds", type=options.count, default=60, help="at least so long")
    parser.add_argument("--rate", type=options.count, default=60, help="bids a second")
    parser.add_argument("--seed", type=options.seed, default=7, help="of market and faults")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Run the drill.

    Returns:
        0 when every promise was kept, 3 when one was broken.
    """
    # Told to end, end like on Ctrl-C, so that no server outlives the drill.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    with tempfile.TemporaryDirectory(prefix="bidkeel-drill-") as folder:
        figures = drill(arguments, Path(folder))
    if arguments.json:
        sys.stdout.write(json.dumps(asdict(figures)) + "\n")
    else:
        _show(figures)
    return 3 if figures.violations else 0


def drill(arguments: argparse.Namespace, folder: Path) -> Figures:
    """Start everything, let it be harmed and say what became of it."""
    with ExitStack() as stack:
        postgresql = None
        url = f"sqlite:///{folder / 'bidkeel.sqlite'}"
        workers = 1
        if arguments.database == "postgresql":
            postgresql = stack.enter_context(PostgreSQLProcess())
            url, workers = postgresql.url, arguments.workers
        settings = {"BIDKEEL_DATABASE_URL": url, "BIDKEEL_LEASE_S": str(LEASE_S)}
        fleet = stack.enter_context(running(Fleet(folder, workers, settings)))
        advance = stack.enter_context(_progress(arguments.kills))
        run = _Drill(arguments, fleet, postgresql, url, advance)
        return uvloop.run(run.run())


class _Drill:
    """One run: traffic, looks at the money and harm side by side, then the judgement."""

    def __init__(
        self,
        arguments: argparse.Namespace,
        fleet: Fleet,
        postgresql: PostgreSQLProcess | None,
        url: str,
        advance: Callable[[], None],
    ) -> None:
        self._arguments, self._fleet, self._url = arguments, fleet, url
        market, traffic, faults = np.random.default_rng(arguments.seed).spawn(3)
        self._wires = [server.wire() for server in fleet.servers]
        self._traffic = Traffic(self._wires, Market(market).draw, traffic, arguments.rate)
        kills, seconds = arguments.kills, arguments.seconds
        self._nemesis = Nemesis(fleet, postgresql, faults, kills, seconds, advance)

    async def run(self) -> Figures:
        """Everything, from the first line item to the last check."""
        async with AsyncExitStack() as stack:
            for wire in self._wires:
                await stack.enter_async_context(wire)
            return await self._run()

    async def _run(self) -> Figures:
        started_s = time.monotonic()
        for body in line_items(self._arguments.rate * self._arguments.seconds):
            await caller.create(self._wires[0], body)
        await self._harm()
        await self._traffic.tell_again()
        await self._wait_for_grace()
        for name in (TIGHT, WIDE):
            await self._traffic.look(name)
        self._nemesis.note_fallen()
        return await asyncio.to_thread(self._judge, time.monotonic() - started_s)

    async def _harm(self) -> None:
        over = asyncio.Event()
        async with asyncio.TaskGroup() as group:
            group.create_task(self._traffic.play(over))
            group.create_task(self._traffic.watch([TIGHT, WIDE], over))
            try:
                await self._nemesis.rage()
            finally:
                over.set()
        await self._traffic.settle()

    async def _wait_for_grace(self) -> None:
        end = time.monotonic() + AFTER_S_MAX
        database = Database(self._url)
        while await asyncio.to_thread(held, database) and time.monotonic() < end:
            await asyncio.sleep(0.5)
        database.close()

    def _judge(self, seconds: float) -> Figures:
        history, nemesis = self._traffic.history, self._nemesis
        database = Database(self._url)
        violations = judge(history, database, GRACE_S)
        violations += [f"a worker ended by itself: {tail[-500:]}" for tail in nemesis.fallen]
        left, loose = held(database), database.read(unfunded)
        database.close()
        known = sum(row.acknowledged_s is not None for row in history.sent)
        return Figures(
            self._arguments.database,
            len(self._fleet.servers),
            round(seconds, 1),
            dict(nemesis.done),
            dict(sorted(history.calls.items())),
            dict(history.passes),
            len(history.sent),
            known,
            len(history.sent) - known,
            money.nanos_text(sum(history.charged.values())),
            money.nanos_text(loose),
            history.reads,
            round(history.delay_s_max, 2),
            round(max(recovery_s(nemesis.back_s, history.answers_s), default=0.0), 2),
            money.nanos_text(left),
            violations,
        )


class Market:
    """Auctions of two line items, one of which runs out of money on the way."""

    def __init__(self, generator: np.random.Generator) -> None:
        self._generator, self._number = generator, 0

    def draw(self) -> Auction:
        """The next auction."""
        self._number += 1
        rival = RIVAL_MEDIAN_CPM * self._generator.lognormal(0, RIVAL_SIGMA)
        value = int(self._generator.integers(0, 8_000_000))
        name = (TIGHT, WIDE)[int(self._generator.integers(2))]
        return Auction(name, self._number, max(1, int(rival * money.NANOS_PER_CPM)), value)


def line_items(bids: int) -> list[dict[str, object]]:
    """A fixed price with money for about half the bids it will get, and one that learns."""
    half = bids / 2
    value = {"ceiling": "0.008", "typical": "0.004", "arrival": "once"}
    shared = {"currency": "EUR", "bid_cap_cpm": 8, "grace_s": GRACE_S, "value": value}
    amount = f"{max(0.05, half * CHARGE_CPM / 1000 / 2):.6f}"
    flat = {"method": "flat", "price_cpm": PRICE_CPM}
    tight = {"id": TIGHT, "name": "Runs out", "budget": amount, "policy": flat}
    plenty = f"{max(10, half * 8 / 1000):.6f}"
    wide = {"id": WIDE, "name": "Learns", "budget": plenty, "policy": {"method": "ucbid"}}
    return [{**shared, **tight}, {**shared, **wide}]


@contextmanager
def _progress(kills: int) -> Iterator[Callable[[], None]]:
    with report.progress() as bar:
        task = bar.add_task("kills", total=kills)
        yield lambda: bar.update(task, advance=1)


def _show(figures: Figures) -> None:
    for name, value in asdict(figures).items():
        if name != "violations":
            sys.stdout.write(f"{name}: {value}\n")
    for violation in figures.violations[:50]:
        sys.stdout.write(f"VIOLATION {violation}\n")
    sys.stdout.write(f"{len(figures.violations)} violations.\n")
