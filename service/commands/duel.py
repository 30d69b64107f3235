"""The service and a bare endpoint under the same load by turns, so that both meet the same noise.

Apart from what is sent and from how it is shown.
"""

from __future__ import annotations

import socket
import statistics
import subprocess
import sys
import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import Self

from service.commands import bodies, pinning
from service.commands.load import Load, Seen
from service.commands.server_process import HOST, ServerFailed, ServerProcess, free_port, inherited

# Enough that neither server waits for the load, few enough to share one processor.
CONNECTIONS = 16
SERVING, ASKING = 0, 1
_BARE_S_MAX = 20.0


@dataclass(frozen=True, slots=True)
class Side:
    """
    What one server did in one round.

    Args:
        rate: Answers a second.
        processor_us: Of the processes that answer, for each answer.
        whole_us: Of all its processes, the clerk's too.
        marked: Passes among the answers.
    """

    rate: float
    processor_us: float
    whole_us: float
    wait_ms_half: float
    wait_ms_99: float
    marked: int
    wrong: int


@dataclass(slots=True)
class Contest:
    """
    Both sides' rounds of one kind of traffic.

    Args:
        rows: Bids and outcomes in each request, on average.
    """

    name: str
    rows: float = 1
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
    def wait_ratios(self) -> list[float]:
        """Our wait that 99 in 100 answers stayed under, over the bare one's, round by round."""
        pairs = zip(self.ours, self.bare, strict=True)
        return [our.wait_ms_99 / bare.wait_ms_99 for our, bare in pairs]

    @property
    def rows_rate(self) -> float:
        """Rows a second of ours, median of rounds."""
        return statistics.median(side.rate for side in self.ours) * self.rows


class Bare:
    """The bare endpoints in processes of their own, as many as the service's workers."""

    def __init__(self, workers: int = 1) -> None:
        self.port, self._workers = free_port(), workers
        self._child: subprocess.Popen[bytes] | None = None

    @property
    def pid(self) -> int:
        """Its process."""
        return self._child.pid if self._child else 0

    def __enter__(self) -> Self:
        words = [sys.executable, "-m", "service.commands.bare", str(self.port)]
        words.append(str(self._workers))
        self._child = subprocess.Popen(words, env=inherited())  # noqa: S603 - Our own module.
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._child is not None:
            # Asked and not killed, or the processes that it started would stay behind.
            self._child.terminate()
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
    """
    Both servers, and connections to them from another processor where there is one.

    With one worker both servers share one processor; more workers go where the system puts them.
    """

    def __init__(
        self, directory: Path, settings: Mapping[str, str] | None = None, workers: int = 1
    ) -> None:
        self.server = ServerProcess(
            directory, {**(settings or {}), "BIDKEEL_WORKERS": str(workers)}
        )
        self.bare, self._pinned = Bare(workers), workers == 1

    async def __aenter__(self) -> Self:
        with self._on(SERVING):
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
        serving_s = pinning.processor_s if which == "bare" else pinning.serving_s
        # Opened anew: a server closes what lay idle while the other side had its turn.
        load = Load(HOST, port, bodies.PASSED)
        await load.connect(CONNECTIONS)
        # Read before and after, so that only this round's processor time counts.
        served_s, whole_s = serving_s(pid), pinning.processor_s(pid)
        with self._on(ASKING):
            seen = await (load.open_loop(requests, rate) if rate else load.closed_loop(requests))
        await load.close()
        return _side(seen, serving_s(pid) - served_s, pinning.processor_s(pid) - whole_s)

    def _on(self, processor: int) -> AbstractContextManager[None]:
        return pinning.on(processor) if self._pinned else nullcontext()

    @property
    def _pid(self) -> int:
        return self.server.child.pid if self.server.child else 0


def _side(seen: Seen, served_s: float, whole_s: float) -> Side:
    count = len(seen.waits_s)
    return Side(
        rate=seen.rate,
        processor_us=1e6 * served_s / count,
        whole_us=1e6 * whole_s / count,
        wait_ms_half=seen.wait_ms(0.5),
        wait_ms_99=seen.wait_ms(0.99),
        marked=seen.marked,
        wrong=count - seen.statuses["200"],
    )


def spread(numbers: Sequence[float]) -> str:
    """The least and the most of several rounds."""
    return f"{min(numbers):.2f} to {max(numbers):.2f}"
