"""`bidkeel bench rehearse`: how fast auctions are simulated, and what bids beside it wait.

The first figure is of one core and this process alone. The second asks a server of its own for
prices over HTTP, one after the other, with a rehearsal playing in its nice process for half of
the time, in turns, so that both halves meet the same machine.
"""

from __future__ import annotations

import argparse
import asyncio
import json
import tempfile
import time
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import uvloop
from rich.console import Console

from service.commands import caller, options, report
from service.commands.server_process import ServerProcess
from service.commands.wire import Wire
from service.rehearsal.rehearse import rehearse
from service.rehearsal_orders import order_of

SECONDS_MAX = 20.0  # For a million auctions of a scalar method on one core.
AUCTIONS = 1_000_000
SEEDS = 100
METHOD = "kl-ucbid"
TURNS = 6
LINE_ITEM: dict[str, object] = {
    "id": "measured",
    "name": "Measured",
    "currency": "EUR",
    "budget": "1000.00",
    "bid_cap_cpm": 8,
    "value": {"ceiling": "0.1", "typical": "0.02", "arrival": "once"},
    "policy": {"method": METHOD},
}
PLAYED: dict[str, object] = {
    "config": LINE_ITEM,
    "policies": [{"name": "late news", "change": {}}],
    # Late news go the way of production, the slow one, so that it plays all the time.
    "market": {"kind": "iid", "outcome_delay_s": 1},
    "rounds": 1_000_000,
    "seeds": 10,
}


@dataclass(frozen=True, slots=True)
class Speed:
    """How long the auctions took, in seconds."""

    auctions: int
    wall_s: float
    processor_s: float


@dataclass(frozen=True, slots=True)
class Waits:
    """Round trips of bids in milliseconds, alone and beside a rehearsal."""

    alone_ms: list[float]
    beside_ms: list[float]


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--auctions", type=options.count, default=AUCTIONS, help="to simulate")
    parser.add_argument(
        "--bids", type=options.count, default=2000, help="asked for in each of the turns"
    )
    parser.add_argument("--no-server", action="store_true", help="only the simulation")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Simulate, then bid.

    Returns:
        0 when a million auctions took less than 20 s of one core, 1 when not.
    """
    speed = simulate(arguments.auctions)
    waits = None
    if not arguments.no_server:
        with (
            tempfile.TemporaryDirectory(prefix="bidkeel-bench-") as directory,
            ServerProcess(Path(directory)) as server,
        ):
            waits = uvloop.run(measure(server, arguments.bids))
    _show(speed, waits, arguments.json)
    most_s = SECONDS_MAX * arguments.auctions / AUCTIONS
    return 0 if speed.processor_s < max(most_s, 1.0) else 1


def simulate(auctions: int) -> Speed:
    """Play so many auctions of one scalar method, a new snapshot after every one of them."""
    rounds = max(1, auctions // SEEDS)
    order = order_of(_wish(rounds), _CONFIG)
    with report.progress() as bar:
        task = bar.add_task("Simulated auctions", total=rounds * SEEDS)
        wall, processor = time.perf_counter(), time.process_time()
        rehearse(order, lambda count: bar.advance(task, count))
        took = time.perf_counter() - wall, time.process_time() - processor
    return Speed(rounds * SEEDS, *took)


async def measure(server: ServerProcess, bids: int) -> Waits:
    """Ask for prices in turns, alone and beside a rehearsal."""
    waits = Waits([], [])
    async with server.wire() as wire:
        await caller.create(wire, LINE_ITEM)
        await _bids(wire, bids // 4)
        with report.progress() as bar:
            task = bar.add_task("Bids over HTTP", total=2 * TURNS)
            for _ in range(TURNS):
                waits.alone_ms.extend(await _bids(wire, bids))
                bar.advance(task)
                number = await _begin(wire)
                waits.beside_ms.extend(await _bids(wire, bids))
                await wire.post(f"/v1/rehearsals/{number}/cancel", {"reason": "measured"})
                await _until(wire, number, "cancelled")
                bar.advance(task)
    return waits


async def _bids(wire: Wire, count: int) -> list[float]:
    waits = []
    for number in range(count):
        body = {"request_id": f"b{number}", "line_item": "measured", "source": "bench"}
        began = time.perf_counter()
        await wire.post("/v1/bids", body)
        waits.append(1000.0 * (time.perf_counter() - began))
    return waits


async def _begin(wire: Wire) -> str:
    reply = await wire.post("/v1/rehearsals", PLAYED)
    number = str(json.loads(reply.content)["id"])
    await _until(wire, number, "running")
    return number


async def _until(wire: Wire, number: str, state: str) -> None:
    """Wait until it is so, and until it has played something where it is to run."""
    while True:
        shown = json.loads((await wire.get(f"/v1/rehearsals/{number}")).content)
        if shown["state"] == state and (state != "running" or shown["progress"] > 0):
            return
        await asyncio.sleep(0.05)


def _show(speed: Speed, waits: Waits | None, for_a_program: bool) -> None:
    console, data = Console(), _data(speed, waits)
    if for_a_program:
        console.print_json(data=data)
        return
    rows = {name.replace("_", " "): [f"{value:,.3f}"] for name, value in data.items()}
    console.print(report.table(f"Rehearsals of {METHOD}", ["measured"], rows))


def _data(speed: Speed, waits: Waits | None) -> dict[str, float]:
    data = {
        "simulated auctions (count)": float(speed.auctions),
        "time on the clock (s)": speed.wall_s,
        "time of one core (s)": speed.processor_s,
        "auctions per second of one core": speed.auctions / max(speed.processor_s, 1e-9),
    }
    for name, each in () if waits is None else _halves(waits):
        for order in (50, 99):
            data[f"bid over HTTP, {name}, p{order} (ms)"] = float(np.percentile(each, order))
    return data


def _halves(waits: Waits) -> tuple[tuple[str, list[float]], ...]:
    return ("alone", waits.alone_ms), ("beside a rehearsal", waits.beside_ms)


_CONFIG: Mapping[str, Any] = {
    "id": "simulated",
    "name": "Simulated",
    "currency": "EUR",
    "budget": 10**15,
    "daily_budget": None,
    "bid_cap": 10**9,
    "auction": "second",
    "flight": {"starts_ms": 0, "ends_ms": None, "time_zone": "UTC"},
    "spend_on": "won",
    "grace_ms": 900_000,
    "value": {"ceiling": 10**9, "arrival": "accrues", "window_ms": 604_800_000},
    "policy": {"method": METHOD},
}


def _wish(rounds: int) -> Mapping[str, Any]:
    market = {
        **{"kind": "iid", "auction": "second", "floor": 0, "span_ms": 86_400_000},
        "rivals": {"law": "uniform", "low": 0, "high": 10**9},
        "values": {"law": "events", "chance": 0.3, "amount": 10**9},
        **{"value_delay_mean_ms": 0, "outcome_delay_ms": 0, "lost_share": 0.0},
    }
    sizes = {"rounds": rounds, "seeds": SEEDS, "seed": 0, "block": 1}
    policies = [{"name": METHOD, "changes": {}}]
    return {"name": "bench", "policies": policies, "market": market, **sizes}
