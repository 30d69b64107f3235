"""How soon a price moves after the outcome that it moves for, while everything else goes on."""

from __future__ import annotations

import argparse
import asyncio
import itertools
import json
import statistics
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from service.commands import bodies, planting
from service.commands.figures import Figure
from service.commands.growth_ground import SCALAR, Ground, Say, line_items, name_of
from service.commands.server_process import ServerFailed, ServerProcess
from service.commands.wire import Wire

FRESH_MS_MAX = 500.0
# Nobody waits longer for one probe; it counts as this long, and so as missed.
PROBE_S_MAX = 5.0
POLL_S = 0.01
PROBERS = 4  # At once, or a slow price would be looked at less often than a quick one.
TOGETHER = 10  # Bids of one call of the traffic beside; one of them is told of as won.
CALLERS = 8  # Of the traffic beside, so that one late answer does not hold up all of it.
SETTLE_S = 3.0  # Until the first probe, since so many first slices are taught first.


@dataclass(slots=True)
class Beside:
    """Whom the traffic beside the probes asks next, and what it has touched."""

    turn: Iterator[str]
    chosen: np.random.Generator = field(default_factory=lambda: np.random.default_rng(7))
    bids: int = 0
    told: set[str] = field(default_factory=set)
    seconds: float = 0.0


async def fresh(ground: Ground, arguments: argparse.Namespace, say: Say) -> list[Figure]:
    """With line items of each method, all of them bid for by turns."""
    found = list[Figure]()
    for method in arguments.method:
        count = arguments.line_items if method == SCALAR else arguments.active
        say(f"making {count:,} line items of {method}")
        server, _ = await ground.server("grown", line_items(count, method))
        names = [name_of(number, method) for number in range(count)]
        waits_s, beside = await _probed(server, names, arguments, say)
        found += _figures(f"outcome until its price moves, {method}", waits_s, beside)
    return found


def _figures(name: str, waits_s: Sequence[float], beside: Beside) -> list[Figure]:
    # A price that moves late costs money, so the slow ones count and not the mean.
    late_ms = 1000.0 * sorted(waits_s)[int(0.99 * len(waits_s))]
    return [
        Figure(f"{name}, p99", late_ms, "ms", aim=FRESH_MS_MAX),
        Figure(f"{name}, p50", 1000.0 * statistics.median(waits_s), "ms"),
        Figure(f"{name}: line items told of meanwhile", len(beside.told), ""),
        Figure(f"{name}: bids meanwhile", beside.bids / beside.seconds, "a second"),
    ]


async def _probed(
    server: ServerProcess, names: Sequence[str], arguments: argparse.Namespace, say: Say
) -> tuple[list[float], Beside]:
    """Seconds from each receipt until the line item bids from a newer snapshot, under load."""
    # Under load, for an idle worker publishes sooner than a busy one.
    stop, waits, beside = asyncio.Event(), list[float](), Beside(itertools.cycle(names))
    calls = [bodies.bid(server.key, name, features=bodies.FEATURES) for name in names]
    await planting.loaded(server, lambda load: load.closed_loop(calls))
    callers = [_traffic(server, arguments.rate / CALLERS, stop, beside) for _ in range(CALLERS)]
    traffic = asyncio.gather(*callers)
    await asyncio.sleep(SETTLE_S)
    began, beside.bids = time.monotonic(), 0
    probed = iter([names[number % len(names)] for number in range(arguments.probes)])

    async def probe() -> None:
        async with server.wire() as wire:
            for name in probed:
                waits.append(await moved_s(wire, name))
                say(f"{len(waits)} of {arguments.probes} probes among {len(names):,} line items")

    await asyncio.gather(*(probe() for _ in range(PROBERS)))
    beside.seconds = time.monotonic() - began
    stop.set()
    await traffic
    return waits, beside


async def moved_s(wire: Wire, name: str) -> float:
    """Seconds from the receipt of a win until its line item bids from a newer snapshot."""
    told = await _bid(wire, name)
    outcome = {"ticket": told["ticket"], "kind": "won", "clearing_cpm": 0.41}
    await wire.post("/v1/outcomes", {"outcomes": [outcome]})
    began = time.monotonic()
    while (await _bid(wire, name, test=True))["snapshot"] <= told["snapshot"]:
        if time.monotonic() > began + PROBE_S_MAX:
            break
        await asyncio.sleep(POLL_S)
    return time.monotonic() - began


async def _traffic(server: ServerProcess, rate: float, stop: asyncio.Event, beside: Beside) -> None:
    """Bids on all line items by turns, and a win told of for one in ten, whichever it is."""
    async with server.wire() as wire:
        while not stop.is_set():
            began = time.monotonic()
            asked = [_opportunity(next(beside.turn)) for _ in range(TOGETHER)]
            reply = await wire.post("/v1/bids/batch", {"opportunities": asked})
            beside.bids += TOGETHER
            answers = json.loads(reply.content)["answers"]
            one = answers[int(beside.chosen.integers(TOGETHER))]
            won = [one] if one.get("ticket") else []
            told = [{"ticket": one["ticket"], "kind": "won", "clearing_cpm": 0.41} for one in won]
            if told:
                await wire.post("/v1/outcomes", {"outcomes": told})
                beside.told.add(one["line_item"])
            await asyncio.sleep(max(0.0, TOGETHER / rate - (time.monotonic() - began)))


async def _bid(wire: Wire, name: str, *, test: bool = False) -> dict[str, Any]:
    asked = {**_opportunity(name), "test": test, "deadline_ms": bodies.PATIENT_MS}
    reply = await wire.post("/v1/bids", asked)
    answer: dict[str, Any] = json.loads(reply.content)
    if answer.get("ticket") is None:
        raise ServerFailed(f"A bid of the bench passed: {answer}")
    return answer


def _opportunity(name: str) -> dict[str, Any]:
    return bodies.opportunity(name, features=bodies.FEATURES)
