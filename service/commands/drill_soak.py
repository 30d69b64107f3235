"""`bidkeel drill soak`: minutes of even traffic; memory, descriptors and log must stay flat."""

from __future__ import annotations

import argparse
import asyncio
import json
import os
import signal
import sys
import tempfile
import time
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
import uvloop

from service.commands import caller, options
from service.commands.drill_kill import TIGHT, WIDE, Market, line_items
from service.commands.drill_traffic import Traffic
from service.commands.memory_of import family
from service.commands.server_process import ServerProcess

PAGE_BYTES = os.sysconf("SC_PAGE_SIZE")
MIB = 2**20
LOOK_S = 1.0
WARM_UP_SHARE = 0.25  # Caches and arenas fill in the first quarter.
GROWTH_MAX = 0.05
GROWTH_MIB_MIN = 4.0  # One arena of the interpreter's is no leak.
DESCRIPTORS_MORE_MAX = 20
WAL_MIB_MAX = 64


@dataclass(frozen=True, slots=True)
class Look:
    """What the server used at one moment; memory and log in MiB."""

    memory: float
    descriptors: int
    wal: float


@dataclass(frozen=True, slots=True)
class Figures:
    """What a soak found; memory in MiB, at the end of the warm-up and at the end."""

    minutes: float
    calls: dict[str, int]
    memory_first: float
    memory_last: float
    growth: float
    descriptors_first: int
    descriptors_last: int
    wal_max: float
    faults: list[str]


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--minutes", type=float, default=10.0, help="how long")
    parser.add_argument("--rate", type=options.count, default=60, help="bids a second")
    parser.add_argument("--seed", type=options.seed, default=7, help="of the market")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Run the soak on SQLite.

    Returns:
        0 when all stayed flat, else 3.
    """
    # Told to end, end like on Ctrl-C, so that no server outlives the drill.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    with tempfile.TemporaryDirectory(prefix="bidkeel-drill-") as folder:
        with ServerProcess(Path(folder)) as server:
            figures = uvloop.run(_soak(arguments, server))
    if arguments.json:
        sys.stdout.write(json.dumps(asdict(figures)) + "\n")
    else:
        for name, value in asdict(figures).items():
            sys.stdout.write(f"{name}: {value}\n")
    return 3 if figures.faults else 0


async def _soak(arguments: argparse.Namespace, server: ServerProcess) -> Figures:
    seconds = arguments.minutes * 60
    market, generator = np.random.default_rng(arguments.seed).spawn(2)
    async with server.wire() as wire:
        for body in line_items(int(arguments.rate * seconds)):
            await caller.create(wire, body)
        traffic = Traffic([wire], Market(market).draw, generator, arguments.rate)
        over, looks = asyncio.Event(), list[Look]()
        async with asyncio.TaskGroup() as group:
            group.create_task(traffic.play(over))
            group.create_task(traffic.watch([TIGHT, WIDE], over))
            end = time.monotonic() + seconds
            while time.monotonic() < end:
                await asyncio.sleep(LOOK_S)
                looks.append(look(server))
            over.set()
        await traffic.settle()
    return judge(arguments.minutes, dict(traffic.history.calls), looks, traffic.history.faults)


def look(server: ServerProcess) -> Look:
    """What the server's crew uses now, as the kernel counts it."""
    child = server.child
    if child is None:
        return Look(0, 0, 0)
    places = [Path(f"/proc/{one}") for one in family(child.pid)]
    pages = sum(int((place / "statm").read_text().split()[1]) for place in places)
    open_now = sum(len(list((place / "fd").iterdir())) for place in places)
    wal = server.directory / "bidkeel.sqlite-wal"
    log = wal.stat().st_size if wal.exists() else 0
    return Look(pages * PAGE_BYTES / MIB, open_now, log / MIB)


def judge(
    minutes: float, calls: dict[str, int], looks: Sequence[Look], faults: Sequence[str]
) -> Figures:
    """Compare what was used after the warm-up with what was used at the end."""
    warm = int(len(looks) * WARM_UP_SHARE)
    width = max(1, len(looks) // 10)
    first, last = looks[warm : warm + width], looks[-width:]
    before, after = (float(np.median([one.memory for one in part])) for part in (first, last))
    open_before, open_after = (
        int(np.median([one.descriptors for one in part])) for part in (first, last)
    )
    wal = max(one.wal for one in looks)
    found = list(faults)
    if after - before > max(GROWTH_MIB_MIN, GROWTH_MAX * before):
        found.append(f"memory grew from {before:.1f} to {after:.1f} MiB")
    if open_after - open_before > DESCRIPTORS_MORE_MAX:
        found.append(f"descriptors grew from {open_before} to {open_after}")
    if wal > WAL_MIB_MAX:
        found.append(f"the log of SQLite grew to {wal:.1f} MiB")
    return Figures(
        minutes, calls, round(before, 1), round(after, 1), round((after - before) / before, 4),
        open_before, open_after, round(wal, 2), found,
    )  # fmt: skip
