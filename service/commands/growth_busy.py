"""Bids while outcomes are booked and taught and old decisions pruned, against bids alone."""

from __future__ import annotations

import argparse
import asyncio
import json
import subprocess
import sys
from collections.abc import Sequence
from dataclasses import dataclass

from service.commands import bodies, figures, growth_log, planting
from service.commands.figures import Figure
from service.commands.growth_ground import (
    SCALAR,
    Ground,
    Say,
    even,
    line_items,
    name_of,
)
from service.commands.load import Seen
from service.commands.server_process import ServerFailed, ServerProcess

ITEMS = 20
BUSY_MAX = 2.0
# Decisions as old as that are pruned under the usual settings.
OLD_DAYS = 60.0
# So many for each bid of the bench, so that pruning takes a good part of each busy stretch.
OLD_OF_A_BID = 100
TOLD_S = 0.1  # Between two calls with outcomes.
TOLD_SHARE = 5  # One bid in five is told of, as in the mixed traffic.
REST_S = 1.0


@dataclass(frozen=True, slots=True)
class Busy:
    """One busy stretch: its bids, and what was done beside them."""

    seen: Seen
    told: int
    pruned: int
    pruning_s: float


async def busy(ground: Ground, arguments: argparse.Namespace, say: Say) -> list[Figure]:
    """Quiet and busy stretches by turns at one rate."""
    server, _ = await ground.server("busy", line_items(ITEMS, SCALAR))
    # Before any bid: pruning takes the rows of the lowest numbers and looks at their age.
    old = OLD_OF_A_BID * arguments.bids
    growth_log.fill(server, name_of(0), old, say, OLD_DAYS)
    calls = [bodies.bid(server.key, name_of(number)) for number in range(ITEMS)]
    calls *= max(1, arguments.bids // arguments.rounds // ITEMS)
    quiet, loud = list[Seen](), list[Busy]()
    await even(server, calls, arguments.rate)
    for number in range(arguments.rounds):
        say(f"quiet and busy, {number + 1} of {arguments.rounds}")
        tickets = await _tickets(server, len(calls) // TOLD_SHARE)
        await asyncio.sleep(REST_S)
        quiet.append(await even(server, calls, arguments.rate))
        loud.append(await _busy(server, calls, tickets, arguments.rate, old // arguments.rounds))
        await asyncio.sleep(REST_S)
    return _figures(quiet, loud)


def _figures(quiet: Sequence[Seen], loud: Sequence[Busy]) -> list[Figure]:
    def worse(share: float) -> list[float]:
        pairs = zip(loud, quiet, strict=True)
        return [one.seen.wait_ms(share) / alone.wait_ms(share) for one, alone in pairs]

    seconds = sum(one.seen.seconds for one in loud)
    pruning = sum(min(one.pruning_s, one.seen.seconds) for one in loud) / seconds
    return [
        figures.of_rounds("busy over quiet, bid p99", "times", worse(0.99), BUSY_MAX),
        figures.of_rounds("busy over quiet, bid p50", "times", worse(0.5)),
        figures.of_rounds("quiet, bid p99", "ms", [one.wait_ms(0.99) for one in quiet]),
        figures.of_rounds("busy, bid p99", "ms", [one.seen.wait_ms(0.99) for one in loud]),
        Figure("busy, outcomes", sum(one.told for one in loud) / seconds, "a second"),
        Figure("busy, old decisions pruned", sum(one.pruned for one in loud), "rows"),
        Figure("busy, pruning was under way", 100.0 * pruning, "% of the time"),
    ]


async def _tickets(server: ServerProcess, count: int) -> list[str]:
    """Of all line items by turns."""
    each = max(1, count // ITEMS)
    found = [await planting.tickets(server, name_of(number), each) for number in range(ITEMS)]
    return [ticket for turn in zip(*found, strict=True) for ticket in turn]


async def _busy(
    server: ServerProcess, calls: Sequence[bytes], tickets: list[str], rate: float, rows: int
) -> Busy:
    with subprocess.Popen(  # noqa: S603 - Our own module.
        [sys.executable, "-m", "service.commands.pruner", str(rows)],
        env=server.environment,
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
    ) as pruner:
        if pruner.stdin is None or pruner.stdout is None or not pruner.stdout.readline():
            raise ServerFailed("The pruning of the bench did not start.")
        stop, told = asyncio.Event(), list[str]()
        telling = asyncio.create_task(_tell(server, tickets, rate, stop, told))
        pruner.stdin.write(b"\n")
        pruner.stdin.flush()
        seen = await even(server, calls, rate)
        stop.set()
        await telling
        said = json.loads(pruner.communicate()[0])
    return Busy(seen, len(told), said["rows"], said["seconds"])


async def _tell(
    server: ServerProcess, tickets: list[str], rate: float, stop: asyncio.Event, told: list[str]
) -> None:
    """Tell of wins evenly; `told` takes those that were heard."""
    group = max(1, round(rate * TOLD_S / TOLD_SHARE))
    async with server.wire() as wire:
        for at in range(0, len(tickets), group):
            if stop.is_set():
                break
            part = tickets[at : at + group]
            wins = [{"ticket": one, "kind": "won", "clearing_cpm": 0.41} for one in part]
            await wire.post("/v1/outcomes", {"outcomes": wins})
            told += part
            await asyncio.sleep(TOLD_S)
