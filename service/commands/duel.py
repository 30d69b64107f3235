"""The service and a bare endpoint under the same load by turns, so that both meet the same noise.

Apart from what is sent and from how it is shown.
"""

from __future__ import annotations

import json
import socket
import statistics
import subprocess
import sys
import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from service.commands import bodies, pinning
from service.commands.load import Load, Seen
from service.commands.server_process import HOST, ServerFailed, ServerProcess, free_port, inherited

# Enough that neither server waits for the load, few enough to share one processor.
CONNECTIONS = 16
SERVING, ASKING = 0, 1
_BARE_S_MAX = 20.0


@dataclass(frozen=True, slots=True)
class Side:
    """What one server did in one round: answers a second, processor time each, passes."""

    rate: float
    processor_us: float
    wait_ms_half: float
    wait_ms_99: float
    marked: int
    wrong: int


@dataclass(slots=True)
class Contest:
    """
    Both sides' rounds of one kind of traffic.

    Args:
        rows: Bids or outcomes in each request.
    """

    name: str
    rows: int = 1
    bare: list[Side] = field(default_factory=list)
    ours: list[Side] = field(default_factory=list)

    @property
    def ratios(self) -> list[float]:
        """Ours over the bare one's answers a second, round by round."""
        return [our.rate / bare.rate for our, bare in zip(self.ours, self.bare, strict=True)]

    @property
    def ratio(self) -> float:
        """Their median."""
        return statistics.median(self.ratios)

    @property
    def work_ratio(self) -> float:
        """The bare one's processor time for a request over ours, median of rounds."""
        pairs = zip(self.bare, self.ours, strict=True)
        return statistics.median(bare.processor_us / our.processor_us for bare, our in pairs)

    @property
    def rows_rate(self) -> float:
        """Rows a second of ours, median of rounds."""
        return statistics.median(side.rate for side in self.ours) * self.rows


class Bare:
    """The bare endpoints in a process of their own."""

    def __init__(self) -> None:
        self.port = free_port()
        self._child: subprocess.Popen[bytes] | None = None

    @property
    def pid(self) -> int:
        """Its process."""
        return self._child.pid if self._child else 0

    def __enter__(self) -> Self:
        words = [sys.executable, "-m", "service.commands.bare", str(self.port)]
        self._child = subprocess.Popen(words, env=inherited())  # noqa: S603 - Our own module.
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._child is not None:
            self._child.kill()
            self._child.wait()

    def wait(self) -> None:
        """
        Wait until it listens.

        Raises:
            ServerFailed: It did not listen in time.
        """
        end = time.monotonic() + _BARE_S_MAX
        while time.monotonic() < end:
            with socket.socket() as probe:
                if probe.connect_ex((HOST, self.port)) == 0:
                    return
            time.sleep(0.05)
        raise ServerFailed("The bare endpoint did not start.")


class Pair:
    """Both servers on one processor, and connections to both from another one."""

    def __init__(self, directory: Path, settings: Mapping[str, str] | None = None) -> None:
        self.server = ServerProcess(directory, settings)
        self.bare = Bare()

    async def __aenter__(self) -> Self:
        with pinning.on(SERVING):
            self.bare.__enter__()
            self.server.start()
        self.bare.wait()
        return self

    async def __aexit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.server.stop()
        self.bare.__exit__(kind, error, trace)

    async def create(self, members: Mapping[str, Any]) -> None:
        """
        Make a line item.

        Raises:
            ServerFailed: It was refused.
        """
        async with self.server.wire() as wire:
            reply = await wire.post("/v1/line-items", members)
        if reply.status != 201:
            raise ServerFailed(f"A line item was refused: {reply.content[:300]!r}")

    async def tickets(self, name: str, count: int) -> list[str]:
        """So many tickets of bids that left."""
        load, found = Load(HOST, self.server.port, keep=True), list[str]()
        await load.connect(4)
        # A batch may hold passes, so it is asked on until there are enough.
        while len(found) < count:
            calls = [bodies.batch(self.server.key, name)] * max(
                1, (count - len(found)) // bodies.BATCH_ROWS
            )
            found += bodies.tickets_of((await load.closed_loop(calls)).bodies)
        await load.close()
        return found[:count]

    async def round(
        self,
        contest: Contest,
        requests: Callable[[], Iterable[bytes]],
        rate: float | None = None,
    ) -> None:
        """
        One round of each side, the bare one first.

        Args:
            requests: Makes what both are asked.
            rate: Requests per second; None for as fast as either answers.
        """
        contest.bare.append(await self._side("bare", requests(), rate))
        contest.ours.append(await self._side("ours", requests(), rate))

    async def _side(self, which: str, requests: Iterable[bytes], rate: float | None) -> Side:
        pid, port = (
            (self.bare.pid, self.bare.port) if which == "bare" else (self._pid, self.server.port)
        )
        # Opened anew: a server closes what lay idle while the other side had its turn.
        load = Load(HOST, port, bodies.PASSED)
        await load.connect(CONNECTIONS)
        # Read before and after, so that only this round's processor time counts.
        began_s = pinning.processor_s(pid)
        with pinning.on(ASKING):
            seen = await (load.open_loop(requests, rate) if rate else load.closed_loop(requests))
        await load.close()
        return _side(seen, pinning.processor_s(pid) - began_s)

    @property
    def _pid(self) -> int:
        return self.server.child.pid if self.server.child else 0


def _side(seen: Seen, spent_s: float) -> Side:
    count = len(seen.waits_s)
    return Side(
        rate=seen.rate,
        processor_us=1e6 * spent_s / count,
        wait_ms_half=seen.wait_ms(0.5),
        wait_ms_99=seen.wait_ms(0.99),
        marked=seen.marked,
        wrong=count - seen.statuses["200"],
    )


def spread(numbers: Sequence[float]) -> str:
    """The least and the most of several rounds."""
    return f"{min(numbers):.2f} to {max(numbers):.2f}"


def as_json(contest: Contest) -> dict[str, Any]:
    """A contest for a program."""
    members: dict[str, Any] = json.loads(json.dumps([_plain(contest.bare), _plain(contest.ours)]))
    bare, ours = members
    return {
        "name": contest.name,
        "rows": contest.rows,
        "ratio": contest.ratio,
        "ratios": contest.ratios,
        "work_ratio": contest.work_ratio,
        "bare": bare,
        "ours": ours,
    }


def _plain(sides: Sequence[Side]) -> list[dict[str, float]]:
    return [{name: getattr(side, name) for name in Side.__slots__} for side in sides]
