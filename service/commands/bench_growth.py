"""`bidkeel bench growth`: whether bids stay as quick as line items, log and lessons grow."""

from __future__ import annotations

import argparse
import asyncio
import itertools
import json
import statistics
import sys
import tempfile
import time
from collections.abc import Callable, Iterable, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from rich.console import Console

from service.commands import bodies, options, pinning, report
from service.commands.load import Load, Seen, post
from service.commands.server_process import HOST, ServerFailed, ServerProcess
from service.commands.wire import Wire
from service.store import decisions
from service.store.database import Database

CONNECTIONS, CROWD = 16, 32
# Few enough for one statement, many enough that its overhead does not count.
LOGGED_AT_ONCE = 10_000
FRESH_S_MAX = 20.0
POLL_S = 0.005
DAY_MS = 86_400_000


@dataclass(frozen=True, slots=True)
class Finding:
    """One figure beside what it is held against; units stand in the name."""

    name: str
    figure: float
    beside: float | None
    aim: float
    reached: bool


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--line-items", type=options.count, default=10_000, help="to grow to")
    parser.add_argument(
        "--decisions", type=options.count, default=10_000_000, help="in the log, to grow to"
    )
    parser.add_argument("--rate", type=options.count, default=1000, help="bids a second")
    parser.add_argument("--bids", type=options.count, default=10_000, help="for each figure")
    parser.add_argument("--probes", type=options.count, default=100, help="of freshness")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Let a server grow step by step and time bids at an even rate before and after.

    Returns:
        0 when every aim was reached, 1 when one was not.
    """
    with tempfile.TemporaryDirectory() as folder, ServerProcess(Path(folder)) as server:
        findings = asyncio.run(_grown(server, arguments))
    if arguments.json:
        sys.stdout.write(json.dumps([asdict(one) for one in findings]) + "\n")
    else:
        _show(findings, arguments)
    return 0 if all(one.reached for one in findings) else 1


async def _grown(server: ServerProcess, arguments: argparse.Namespace) -> list[Finding]:
    names = [f"bench-{number}" for number in range(arguments.line_items)]
    with report.progress() as bar:
        task = bar.add_task("Steps", total=8)

        def step(text: str) -> None:
            bar.update(task, advance=1, description=text)

        # One line item first, so that the same server is its own measure of before.
        await _create(server, names[:1])
        alone = await _paced(server, names[:1], arguments)
        step("Line items")
        await _create(server, names[1:])
        # Before anybody asked for them, as a worker reads a line item only when it is asked.
        idle_kib = _memory_kib(server)
        await _asked_once(server, names)
        known_kib = (_memory_kib(server) - idle_kib) / len(names)
        step("Bids among many")
        many = await _paced(server, names, arguments)
        step("One hot line item")
        hot = [await _flat_out(server, names[0], count, arguments) for count in (16, CROWD)]
        step("Freshness")
        fresh = await _freshness(server, names, arguments)
        step("Start")
        started_s = _restarted_s(server)
        step("Decisions")
        before = await _paced(server, names[:1], arguments)
        _log(server, names, arguments.decisions, lambda text: bar.update(task, description=text))
        after = await _paced(server, names[:1], arguments)
        step("Done")
    return _findings(arguments, (alone, many), (before, after), hot, fresh, known_kib, started_s)


def _findings(
    arguments: argparse.Namespace,
    items: tuple[Seen, Seen],
    logged: tuple[Seen, Seen],
    hot: Sequence[Seen],
    fresh: Sequence[float],
    known_kib: float,
    started_s: float,
) -> list[Finding]:
    def flat(name: str, pair: tuple[Seen, Seen]) -> Finding:
        first, last = (seen.wait_ms(0.5) for seen in pair)
        return Finding(f"{name}, bid p50 (ms)", last, first, 1.2, last <= 1.2 * first)

    # A price that moves late costs money, so the slow ones count and not the mean.
    late_ms = 1000.0 * sorted(fresh)[int(0.99 * len(fresh))]
    return [
        flat(f"1 to {arguments.line_items:,} line items", items),
        flat(f"0 to {arguments.decisions:,} decisions in the log", logged),
        Finding("memory for an idle line item (KiB)", known_kib, None, 6.0, known_kib <= 6.0),
        Finding(
            f"start with {arguments.line_items:,} line items (s)",
            *(started_s, None, 5.0, started_s < 5.0),
        ),
        Finding(
            f"{CROWD} connections on one line item (bids a second)",
            *(hot[1].rate, hot[0].rate, 0.9, hot[1].rate >= 0.9 * hot[0].rate),
        ),
        Finding(
            "outcome acknowledged until the price moves, p99 (ms)",
            *(late_ms, 1000.0 * statistics.median(fresh), 500.0, late_ms < 500.0),
        ),
    ]


async def _create(server: ServerProcess, names: Sequence[str]) -> None:
    calls = [
        post("/v1/line-items", json.dumps(bodies.line_item(name, "kl-ucbid")).encode(), server.key)
        for name in names
    ]
    seen = await _loaded(server, CONNECTIONS, lambda load: load.closed_loop(calls))
    if seen.statuses["201"] != len(names):
        raise ServerFailed(f"Line items were refused: {dict(seen.statuses)}")


async def _asked_once(server: ServerProcess, names: Sequence[str]) -> None:
    """So that the worker knows them all; a test leases nothing."""
    asked = [{**bodies.opportunity(name), "test": True} for name in names]
    calls = [post("/v1/bids", json.dumps(one).encode(), server.key) for one in asked]
    await _loaded(server, CONNECTIONS, lambda load: load.closed_loop(calls))


async def _paced(
    server: ServerProcess, names: Sequence[str], arguments: argparse.Namespace
) -> Seen:
    """Bids at an even rate; each line item has leased its first slice before."""
    calls = [bodies.bid(server.key, name) for name in names]
    await _loaded(server, CONNECTIONS, lambda load: load.closed_loop(calls))
    asked = itertools.islice(itertools.cycle(calls), arguments.bids)
    return await _loaded(server, CONNECTIONS, lambda load: load.open_loop(asked, arguments.rate))


async def _flat_out(
    server: ServerProcess, name: str, connections: int, arguments: argparse.Namespace
) -> Seen:
    calls = itertools.repeat(bodies.bid(server.key, name), arguments.bids)
    return await _loaded(server, connections, lambda load: load.closed_loop(calls))


async def _freshness(
    server: ServerProcess, names: Sequence[str], arguments: argparse.Namespace
) -> list[float]:
    """Seconds from each receipt until the line item bids from a newer snapshot, under load."""
    # Under load, for an idle worker publishes sooner than a busy one.
    stop, waits = asyncio.Event(), list[float]()
    traffic = asyncio.create_task(_background(server, names, arguments.rate, stop))
    async with server.wire() as wire:
        for number in range(arguments.probes):
            waits.append(await _moved_s(wire, names[number % len(names)]))
    stop.set()
    await traffic
    return waits


async def _moved_s(wire: Wire, name: str) -> float:
    """Seconds from a receipt until bids come from a newer snapshot."""
    told = await _bid(wire, name)
    outcome = {"ticket": told["ticket"], "kind": "won", "clearing_cpm": 0.41}
    await wire.post("/v1/outcomes", {"outcomes": [outcome]})
    began = time.monotonic()
    while (await _bid(wire, name, test=True))["snapshot"] <= told["snapshot"]:
        if time.monotonic() > began + FRESH_S_MAX:
            break
        await asyncio.sleep(POLL_S)
    return time.monotonic() - began


async def _background(
    server: ServerProcess, names: Sequence[str], rate: float, stop: asyncio.Event
) -> None:
    """Bids on all line items by turns, and a win told of for every tenth of them."""
    turn = itertools.cycle(names)
    async with server.wire() as wire:
        while not stop.is_set():
            began = time.monotonic()
            asked = [bodies.opportunity(next(turn)) for _ in range(10)]
            reply = await wire.post("/v1/bids/batch", {"opportunities": asked})
            tickets = bodies.tickets_of([reply.content])[:1]
            told = [{"ticket": one, "kind": "won", "clearing_cpm": 0.41} for one in tickets]
            if told:
                await wire.post("/v1/outcomes", {"outcomes": told})
            await asyncio.sleep(max(0.0, 10.0 / rate - (time.monotonic() - began)))


async def _bid(wire: Wire, name: str, *, test: bool = False) -> dict[str, Any]:
    reply = await wire.post("/v1/bids", {**bodies.opportunity(name), "test": test})
    answer: dict[str, Any] = json.loads(reply.content)
    if answer.get("ticket") is None:
        raise ServerFailed(f"A bid of the bench passed: {answer}")
    return answer


def _log(
    server: ServerProcess, names: Sequence[str], count: int, say: Callable[[str], None]
) -> None:
    """Fill the decision log in bulk, as a worker writes it, spread over a day."""
    database = Database(server.environment["BIDKEEL_DATABASE_URL"])
    now_ms = time.time_ns() // 1_000_000
    row = {"ref": "r" * 22, "request_id": "op-81f2", "source": "north-exchange", "floor": 400_000}
    row |= {"price": 1_000_000, "reason": None, "set_by": "value", "snapshot": 1, "test": 0}
    for done in range(0, count, LOGGED_AT_ONCE):
        rows = [
            {
                **row,
                "at_ms": now_ms - DAY_MS + DAY_MS * number // count,
                "line_item": names[number % len(names)],
            }
            for number in range(done, min(done + LOGGED_AT_ONCE, count))
        ]
        decisions.log(database, rows)
        say(f"{done + len(rows):,} of {count:,} decisions")
    database.close()


def _restarted_s(server: ServerProcess) -> float:
    server.stop()
    began = time.monotonic()
    server.start()
    return time.monotonic() - began


def _memory_kib(server: ServerProcess) -> float:
    return float(pinning.memory_kib(server.child.pid)) if server.child else 0.0


async def _loaded(server: ServerProcess, connections: int, play: Callable[[Load], Any]) -> Seen:
    load = Load(HOST, server.port, bodies.PASSED)
    await load.connect(connections)
    try:
        seen: Seen = await play(load)
        return seen
    finally:
        await load.close()


def _show(findings: Iterable[Finding], arguments: argparse.Namespace) -> None:
    rows = {
        one.name: (
            f"{one.figure:,.2f}",
            "" if one.beside is None else f"{one.beside:,.2f}",
            f"{one.aim:g}",
            "yes" if one.reached else "no",
        )
        for one in findings
    }
    title = f"Growth, SQLite, bids at {arguments.rate:,} a second unless said otherwise"
    console = Console(width=120)
    console.print(report.table(title, ["figure", "beside", "aim", "reached"], rows))
    console.print(
        "Beside: the same before growth, with 16 connections, or the median. Aims of p50 and of "
        "bids a second are ratios to it.",
        highlight=False,
    )
