"""A load of HTTP requests over open connections, apart because it must outrun what it measures.

Plain bytes over an event loop's own protocols: a client with conveniences would be slower than
the service it times.
"""

from __future__ import annotations

import asyncio
import selectors
import time
from collections import Counter, deque
from collections.abc import Coroutine, Iterable, Iterator
from dataclasses import dataclass, field
from typing import TypeVar, cast

_LENGTH = b"content-length: "
_END = b"\r\n\r\n"
STALLED_S_MAX = 30.0
# Before a request is due the loop turns for so long, since a timer may be that late.
TURNED_S = 0.0003

Found = TypeVar("Found")


class Stalled(ConnectionError):
    """The server closed a connection, or answered nothing for a long while."""


@dataclass(slots=True)
class Seen:
    """
    What one stretch of load saw.

    Args:
        seconds: How long it took, from the first request to the last answer.
        statuses: Answers by HTTP status.
        waits_s: Seconds from when each request was due to when its answer was whole.
        marked: How often the load's mark stood in an answer.
        bodies: The answers themselves, if they are to be kept.
    """

    seconds: float = 0.0
    statuses: Counter[str] = field(default_factory=Counter)
    waits_s: list[float] = field(default_factory=list)
    marked: int = 0
    bodies: list[bytes] = field(default_factory=list)

    @property
    def rate(self) -> float:
        """Answers per second."""
        return len(self.waits_s) / self.seconds

    def wait_ms(self, share: float) -> float:
        """The wait that this share of the answers stayed under, in milliseconds."""
        ordered = sorted(self.waits_s)
        return 1000.0 * ordered[min(int(share * len(ordered)), len(ordered) - 1)]


class _Connection(asyncio.Protocol):
    """One kept-open connection with at most one request under way."""

    def __init__(self, load: Load) -> None:
        self._load = load
        self._partial = b""
        self._due = 0.0
        self.gone = asyncio.Event()

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        self.transport = cast(asyncio.Transport, transport)
        self._load.idle.append(self)

    def connection_lost(self, exc: Exception | None) -> None:
        self.gone.set()
        self._load.lost()

    def send(self, request: bytes, due: float) -> None:
        self._due = due
        self.transport.write(request)

    def data_received(self, data: bytes) -> None:
        if self._partial:
            data = self._partial + data
        end = data.find(_END)
        at = data.find(_LENGTH, 0, end) + len(_LENGTH) if end >= 0 else 0
        if end < 0 or len(data) < end + len(_END) + int(data[at : data.index(b"\r", at)]):
            self._partial = data
            return
        self._partial = b""
        self._load.answered(self, data[9:12], self._due, data[end + len(_END) :])


class Load:
    """
    A set of open connections to one server.

    Args:
        host: Where it listens.
        port: Where it listens.
        mark: What is counted in the answers.
        keep: Whether the answers are kept.
    """

    def __init__(self, host: str, port: int, mark: bytes = b"", *, keep: bool = False) -> None:
        self._host, self._port = host, port
        self._mark, self._keep = mark, keep
        self.idle: deque[_Connection] = deque()
        self._all: list[_Connection] = []
        self._seen = Seen()
        self._requests: Iterator[bytes] = iter(())
        self._waiting: deque[tuple[bytes, float]] = deque()
        self._busy = 0
        self._open_loop = False
        self._done = asyncio.Event()
        self._broken = False

    async def connect(self, connections: int) -> None:
        """Open so many connections."""
        loop = asyncio.get_running_loop()
        for _ in range(connections):
            _, made = await loop.create_connection(
                lambda: _Connection(self), self._host, self._port
            )
            self._all.append(made)

    async def close(self) -> None:
        """Close every connection."""
        for connection in self._all:
            connection.transport.abort()
        await asyncio.gather(*(connection.gone.wait() for connection in self._all))

    async def closed_loop(self, requests: Iterable[bytes]) -> Seen:
        """
        Send each request as soon as a connection is free, and wait for all answers.

        Raises:
            Stalled: The server went away or fell silent.
        """
        self._begin(iter(requests), open_loop=False)
        began = time.perf_counter()
        for connection in list(self.idle):
            self.idle.remove(connection)
            self._next(connection)
        return await self._finish(began)

    async def open_loop(self, requests: Iterable[bytes], rate: float) -> Seen:
        """
        Send requests at an even rate, whatever the server does; each wait counts from when its
        request was due, so that a server that stands still cannot hide it.

        Args:
            rate: Requests per second.

        Raises:
            Stalled: The server went away or fell silent.
        """
        self._begin(iter(()), open_loop=True)
        began = time.perf_counter()
        for number, request in enumerate(requests):
            due = began + number / rate
            while (left_s := due - time.perf_counter()) > 0:
                await asyncio.sleep(max(0.0, left_s - TURNED_S))
            self._dispatch(request, due)
        return await self._finish(began)

    def answered(self, connection: _Connection, status: bytes, due: float, body: bytes) -> None:
        """Count one whole answer and send what is next."""
        self._seen.waits_s.append(time.perf_counter() - due)
        self._seen.statuses[status.decode()] += 1
        if self._mark:
            self._seen.marked += body.count(self._mark)
        if self._keep:
            self._seen.bodies.append(body)
        self._busy -= 1
        if self._open_loop:
            if self._waiting:
                self._send(connection, *self._waiting.popleft())
            else:
                self.idle.append(connection)
        else:
            self._next(connection)
        if not self._busy:
            self._done.set()

    def lost(self) -> None:
        """A connection ended; while requests are under way nobody may wait for it for ever."""
        self._broken = True
        self._done.set()

    def _begin(self, requests: Iterator[bytes], *, open_loop: bool) -> None:
        self._seen, self._requests, self._open_loop = Seen(), requests, open_loop
        self._done.clear()

    async def _finish(self, began: float) -> Seen:
        while self._busy and not self._broken:
            answers = len(self._seen.waits_s)
            self._done.clear()
            try:
                await asyncio.wait_for(self._done.wait(), STALLED_S_MAX)
            except TimeoutError:
                if len(self._seen.waits_s) == answers:
                    raise Stalled("The server answered nothing for half a minute.") from None
        if self._broken:
            raise Stalled("The server closed a connection under load.")
        self._seen.seconds = time.perf_counter() - began
        return self._seen

    def _next(self, connection: _Connection) -> None:
        request = next(self._requests, None)
        if request is None:
            self.idle.append(connection)
        else:
            self._send(connection, request, time.perf_counter())

    def _dispatch(self, request: bytes, due: float) -> None:
        if self.idle:
            self._send(self.idle.popleft(), request, due)
        else:
            self._waiting.append((request, due))

    def _send(self, connection: _Connection, request: bytes, due: float) -> None:
        self._busy += 1
        connection.send(request, due)


def run(play: Coroutine[object, object, Found]) -> Found:
    """
    Run to the end in a loop whose timers are finer than a millisecond.

    The usual loop's are not: an even load would have to turn without a pause and take a whole
    processor from what it measures.
    """
    with asyncio.Runner(loop_factory=_fine_loop) as runner:
        return runner.run(play)


def _fine_loop() -> asyncio.AbstractEventLoop:
    return asyncio.SelectorEventLoop(selectors.SelectSelector())


def post(path: str, body: bytes, key: str) -> bytes:
    """One whole request as bytes."""
    head = (
        f"POST {path} HTTP/1.1\r\nhost: localhost\r\nauthorization: Bearer {key}\r\n"
        f"content-type: application/json\r\ncontent-length: {len(body)}\r\n\r\n"
    )
    return head.encode() + body
