"""Which processor serves and which one asks, and what serving took, as the kernel counts it."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

_TICK_S = 1.0 / os.sysconf("SC_CLK_TCK")
# Of the command line of a process that answers bids in a crew.
_SERVES = b"\0service.commands.child\0worker\0"


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


def processors() -> int:
    """How many processors this process may use."""
    return len(os.sched_getaffinity(0))


def processor_s(pid: int) -> float:
    """Processor seconds of a process and of all that it started and that lives."""
    return _own_s(pid) + sum(processor_s(child) for child in children(pid))


def serving_s(pid: int) -> float:
    """Processor seconds of the processes of a server that answer bids, and of no others."""
    return sum(_own_s(worker) for worker in workers(pid))


def workers(pid: int) -> list[int]:
    """The processes that answer bids: the workers of a crew, or the server itself."""
    found = [one for one in _family(pid) if _SERVES in _words(one)]
    return found or [pid]


def children(pid: int) -> list[int]:
    """The processes that this one started and that live."""
    threads = Path(f"/proc/{pid}/task").glob("*/children")
    return [int(child) for thread in threads for child in thread.read_text().split()]


def memory_kib(pid: int) -> int:
    """What the process itself keeps in memory, in KiB."""
    status = Path(f"/proc/{pid}/status").read_text()
    return int(status.partition("VmRSS:")[2].split()[0])


def _family(pid: int) -> list[int]:
    return [pid, *(one for child in children(pid) for one in _family(child))]


def _words(pid: int) -> bytes:
    return Path(f"/proc/{pid}/cmdline").read_bytes()


def _own_s(pid: int) -> float:
    # After the name, which may hold blanks and brackets: times in ticks are the 12th and 13th.
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) * _TICK_S
