"""A worker's gauges, read once a second beside the loop, so that no bid stops to be measured."""

from __future__ import annotations

import asyncio
import os
import time
from collections.abc import Callable, Mapping
from pathlib import Path

from service.metrics.tally import Tally

SAMPLE_S = 1.0
_PAGE_BYTES = os.sysconf("SC_PAGE_SIZE")


async def sample(
    tally: Tally, levels: Mapping[str, Callable[[], int]], totals: Mapping[str, Callable[[], int]]
) -> None:
    """
    Write down levels, and what totals have grown by, until cancelled.

    Args:
        totals: Sums since this process began; the row of its place in the crew goes on.
    """
    tally.set("start_timestamp_seconds", value=time.time_ns() // 1_000_000)
    # From nought: what grew before the first look has happened in this process, too.
    before = dict.fromkeys(totals, 0)
    while True:
        before = once(tally, levels, totals, before)
        await asyncio.sleep(SAMPLE_S)


def once(
    tally: Tally,
    levels: Mapping[str, Callable[[], int]],
    totals: Mapping[str, Callable[[], int]],
    before: Mapping[str, int],
) -> dict[str, int]:
    """One look; returns the totals as they were seen."""
    seen = {name: read() for name, read in totals.items()}
    for name, total in seen.items():
        tally.add(name, count=total - before[name])
    for name, read in levels.items():
        tally.set(name, value=read())
    tally.set("memory_bytes", value=_memory_bytes())
    return seen


def _memory_bytes() -> int:
    pages = Path("/proc/self/statm").read_text().split()[1]
    return int(pages) * _PAGE_BYTES
