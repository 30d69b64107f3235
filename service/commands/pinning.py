"""Which processor serves and which one asks, and what serving took, as the kernel counts it."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

_TICK_S = 1.0 / os.sysconf("SC_CLK_TCK")


@contextmanager
def on(processor: int) -> Iterator[None]:
    """Keep this process, and what it starts meanwhile, on one processor where there are two."""
    allowed = os.sched_getaffinity(0)
    if len(allowed) < 2:
        yield
        return
    os.sched_setaffinity(0, {sorted(allowed)[processor]})
    try:
        yield
    finally:
        os.sched_setaffinity(0, allowed)


def processor_s(pid: int) -> float:
    """Processor seconds of a process and of all that it started and that lives."""
    return _own_s(pid) + sum(processor_s(child) for child in children(pid))


def children(pid: int) -> list[int]:
    """The processes that this one started and that live."""
    threads = Path(f"/proc/{pid}/task").glob("*/children")
    return [int(child) for thread in threads for child in thread.read_text().split()]


def memory_kib(pid: int) -> int:
    """What the process itself keeps in memory, in KiB."""
    status = Path(f"/proc/{pid}/status").read_text()
    return int(status.partition("VmRSS:")[2].split()[0])


def _own_s(pid: int) -> float:
    # After the name, which may hold blanks and brackets: times in ticks are the 12th and 13th.
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) * _TICK_S
