"""How bids, memory and start grow with the number of line items, and with the callers of one."""

from __future__ import annotations

import argparse
import json
import time

from service.commands import bodies, figures, planting
from service.commands.figures import Figure
from service.commands.growth_ground import (
    SCALAR,
    Ground,
    Say,
    asked,
    by_turns,
    enclosed,
    flat,
    line_items,
    memory_kib,
    name_of,
)
from service.commands.load import Seen, post
from service.commands.server_process import ServerProcess

FEW, CROWD = 16, 32
MADE_S_MAX, START_S_MAX, ITEM_KIB_MAX, CROWD_MIN = 60.0, 5.0, 6.0, 0.9


async def items(ground: Ground, arguments: argparse.Namespace, say: Say) -> list[Figure]:
    """From one line item to many."""
    count = arguments.line_items
    names, many = [name_of(number) for number in range(count)], f"{count:,} line items"
    small, _ = await ground.server("small", line_items(1, SCALAR))
    say(f"making {many}")
    grown, made_s = await ground.server("grown", line_items(count, SCALAR))
    # Before anybody asked for them, as a worker reads a line item only when it is asked.
    idle_kib = memory_kib(grown)
    await _asked_once(grown, names)
    known_kib = (memory_kib(grown) - idle_kib) / count
    active = names[: arguments.active]
    say(f"bids on one, on {len(active)} of {many} and on all")
    one, few = asked(small, names[:1]), asked(grown, active)
    some = await by_turns([one, few], arguments)
    every = await enclosed(one, asked(grown, names), arguments)
    say("start")
    return [
        *flat(f"1 to {many}, {len(active)} of them asked", *some),
        *flat(f"1 to {many}, all asked by turns", *every),
        Figure(f"{many}, made one call each", made_s, "s", aim=MADE_S_MAX),
        Figure("memory of a worker for an idle line item", known_kib, "KiB", aim=ITEM_KIB_MAX),
        Figure(f"start with {many}", _restarted_s(grown), "s", aim=START_S_MAX),
    ]


async def crowd(ground: Ground, arguments: argparse.Namespace, say: Say) -> list[Figure]:
    """One hot line item, asked over few and over many connections by turns."""
    server, _ = await ground.server("small", line_items(1, SCALAR))
    say(f"{FEW} and {CROWD} connections on one line item")
    found: dict[int, list[float]] = {FEW: [], CROWD: []}
    for _ in range(arguments.rounds + 1):
        for connections, rates in found.items():
            rates.append((await _flat_out(server, connections, arguments)).rate)
    # The first round lets slices grow.
    few, many = (rates[1:] for rates in found.values())
    shares = [more / less for less, more in zip(few, many, strict=True)]
    return [
        figures.of_rounds(
            f"{CROWD} connections over {FEW} on one line item, rate",
            *("times", shares, CROWD_MIN),
            at_least=True,
        ),
        figures.of_rounds(f"{CROWD} connections on one line item", "bids a second", many),
    ]


async def _flat_out(server: ServerProcess, connections: int, arguments: argparse.Namespace) -> Seen:
    calls = [bodies.bid(server.key, name_of(0))] * max(1, arguments.bids // arguments.rounds)
    return await planting.loaded(server, lambda load: load.closed_loop(calls), connections)


async def _asked_once(server: ServerProcess, names: list[str]) -> None:
    """So that the worker knows them all; a test leases nothing."""
    tests = [{**bodies.opportunity(name), "test": True} for name in names]
    calls = [post("/v1/bids", json.dumps(one).encode(), server.key) for one in tests]
    await planting.loaded(server, lambda load: load.closed_loop(calls))


def _restarted_s(server: ServerProcess) -> float:
    server.stop()
    began = time.monotonic()
    server.start()
    return time.monotonic() - began
