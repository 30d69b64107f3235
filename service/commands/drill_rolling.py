"""`bidkeel drill rolling`: servers restarted one after the other under load; nobody may notice.

Each is told to stop while the balancer still sends to it, and comes back in when it is ready.
"""

from __future__ import annotations

import argparse
import asyncio
import json
import signal
import sys
import tempfile
import time
from collections.abc import Callable
from contextlib import AsyncExitStack, ExitStack
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
import uvloop
from sqlalchemy import text

from service import money
from service.commands import caller, options, report
from service.commands.balancer import Balancer
from service.commands.drill_kill import Market, line_items
from service.commands.drill_nemesis import Fleet, running
from service.commands.drill_record import OK
from service.commands.drill_traffic import Traffic
from service.commands.drill_verdict import held, judge
from service.commands.postgresql_process import PostgreSQLProcess
from service.commands.server_process import ServerProcess
from service.store.database import Database

# Far longer than the drill, so that a slice which is not given back shows as money still held.
LEASE_S = 120
GRACE_S = 600
SETTLE_S = 0.5
# The service answers by its deadline or passes; a longer wait is the machine's, and no failure.
ANSWER_S = 10.0
MONEY_FACTOR = 4000  # Three hands full of slices must leave no wish for money open.


@dataclass(frozen=True, slots=True)
class Figures:
    """
    What a roll-out looked like from outside and inside.

    Attributes:
        bids: Calls for a price, each counted once however often the balancer moved it on.
        failed_bids: Those that ended without an answer 200.
        passes: Answers without a price, by their documented reason.
        moved: Requests that the balancer gave to another server, by why.
        lost: Outcomes never acknowledged, or acknowledged and not in the ledger once.
        kept_slices: Open slices found right after a stop that belong to nobody who lives.
        stop_s_max: From the signal to the end of the slowest stop.
    """

    servers: int
    restarts: int
    seconds: float
    bids: int
    failed_bids: int
    passes: dict[str, int]
    moved: dict[str, int]
    outcomes: int
    lost: int
    kept_slices: int
    stop_s_max: float
    held_end: str
    violations: list[str]


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--servers", type=options.count, default=3, help="on one PostgreSQL")
    parser.add_argument("--rounds", type=options.count, default=2, help="restarts of each")
    parser.add_argument("--rate", type=options.count, default=60, help="bids a second")
    parser.add_argument("--seed", type=options.seed, default=7, help="of the market")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Run the drill on a PostgreSQL of its own.

    Returns:
        0 when every promise was kept, 3 when one was broken.
    """
    # Told to end, end like on Ctrl-C, so that no server outlives the drill.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    with ExitStack() as stack:
        folder = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="bidkeel-drill-")))
        url = stack.enter_context(PostgreSQLProcess()).url
        settings = {"BIDKEEL_DATABASE_URL": url, "BIDKEEL_LEASE_S": str(LEASE_S)}
        fleet = stack.enter_context(running(Fleet(folder, arguments.servers, settings)))
        bar = stack.enter_context(report.progress())
        task = bar.add_task("restarts", total=arguments.rounds * arguments.servers)
        drill = _Rolling(arguments, fleet, url, lambda: bar.update(task, advance=1))
        figures = uvloop.run(drill.run())
    if arguments.json:
        sys.stdout.write(json.dumps(asdict(figures)) + "\n")
    else:
        for name, value in asdict(figures).items():
            sys.stdout.write(f"{name}: {value}\n")
    return 3 if figures.violations else 0


class _Rolling:
    """One roll-out under load, and the judgement after it."""

    def __init__(
        self, arguments: argparse.Namespace, fleet: Fleet, url: str, advance: Callable[[], None]
    ) -> None:
        self._arguments, self._fleet, self._url, self._advance = arguments, fleet, url, advance
        self._kept, self._stops_s = 0, list[float]()
        self._database = Database(url)

    async def run(self) -> Figures:
        """Load, restarts one by one, everything told, everybody stopped, everything checked."""
        started_s = time.monotonic()
        market, generator = np.random.default_rng(self._arguments.seed).spawn(2)
        async with AsyncExitStack() as stack:
            wires = [server.wire() for server in self._fleet.servers]
            for wire in wires:
                await stack.enter_async_context(wire)
            balancer = Balancer(wires)
            for body in line_items(self._arguments.rate * MONEY_FACTOR):
                await caller.create(wires[0], {**body, "grace_s": GRACE_S})
            draw, rate = Market(market).draw, self._arguments.rate
            traffic = Traffic([balancer], draw, generator, rate, ANSWER_S)
            await self._under_load(traffic, balancer)
        await asyncio.to_thread(self._fleet.stop)
        seconds = time.monotonic() - started_s
        try:
            return await asyncio.to_thread(self._judge, traffic, balancer, seconds)
        finally:
            self._database.close()

    async def _under_load(self, traffic: Traffic, balancer: Balancer) -> None:
        over = asyncio.Event()
        async with asyncio.TaskGroup() as group:
            group.create_task(traffic.play(over))
            try:
                await asyncio.sleep(SETTLE_S)
                for _ in range(self._arguments.rounds):
                    for place, server in enumerate(self._fleet.servers):
                        await self._restart(place, server, balancer)
            finally:
                over.set()
        await traffic.settle()
        await traffic.tell_again(every=True)

    async def _restart(self, place: int, server: ServerProcess, balancer: Balancer) -> None:
        """Stop one that is still sent to, look at what it left, start it and bring it in."""
        began_s = time.monotonic()
        await asyncio.to_thread(server.stop)
        self._stops_s.append(time.monotonic() - began_s)
        # Though perhaps nobody was refused: while it starts, requests would wait at its door.
        balancer.take_out(place)
        self._kept += await asyncio.to_thread(kept_slices, self._database)
        await asyncio.to_thread(server.start)
        balancer.bring_in(place)
        await asyncio.sleep(SETTLE_S)
        self._advance()

    def _judge(self, traffic: Traffic, balancer: Balancer, seconds: float) -> Figures:
        history, left = traffic.history, held(self._database)
        violations = judge(history, self._database, GRACE_S)
        bids = {name: n for name, n in history.calls.items() if name.startswith("bid ")}
        # A pass is an answer too; only a call without one has failed.
        failed = sum(bids.values()) - bids.get(f"bid {OK}", 0)
        lost = [row for row in history.sent if row.acknowledged_s is None]
        lost_count = len(lost) + sum(fault.startswith("lost:") for fault in violations)
        violations += [f"{failed} bids failed"] if failed else []
        violations += [f"{lost_count} outcomes are lost"] if lost_count else []
        violations += [f"{self._kept} slices were kept"] if self._kept else []
        return Figures(
            len(self._fleet.servers),
            len(self._stops_s),
            round(seconds, 1),
            sum(bids.values()),
            failed,
            dict(history.passes),
            dict(balancer.moved),
            len(history.sent),
            lost_count,
            self._kept,
            round(max(self._stops_s), 2),
            money.nanos_text(left),
            violations,
        )


def kept_slices(database: Database) -> int:
    """Open slices of workers that are not on the list: whoever left in order has none."""
    statement = text(
        "SELECT count(*) FROM slice WHERE state = 'open' AND worker NOT IN (SELECT id FROM worker)"
    )
    return database.read(lambda c: int(c.execute(statement).scalar_one()))
