"""The load against a small server of the test's own, whose answers are known."""

from __future__ import annotations

import asyncio
import contextlib
import itertools
import time
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

import pytest

from service.commands.load import Load, Stalled, post, run

REQUEST = post("/path", b"{}", "key")


@asynccontextmanager
async def answering(
    pause_s: float = 0.0, pieces: int = 1, leave_after: int = 0
) -> AsyncIterator[int]:
    """The port of a server that answers every request after a pause, in so many pieces."""
    count = itertools.count(1)

    async def serve(reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        while await reader.read(len(REQUEST)):
            if leave_after and next(count) > leave_after:
                break
            await asyncio.sleep(pause_s)
            answer = b"HTTP/1.1 200 OK\r\ncontent-length: 10\r\n\r\nmark,mark,"
            size = -(-len(answer) // pieces)
            for at in range(0, len(answer), size):
                writer.write(answer[at : at + size])
                await asyncio.sleep(0)
        writer.close()
        with contextlib.suppress(OSError):
            await writer.wait_closed()

    server = await asyncio.start_server(serve, "127.0.0.1", 0)
    async with server:
        yield server.sockets[0].getsockname()[1]


@pytest.mark.parametrize("pieces", [1, 5])
def test_every_request_is_sent_and_every_answer_counted(pieces: int) -> None:
    """However an answer is cut into pieces on its way, it is counted once and searched whole."""

    async def play() -> None:
        async with answering(pieces=pieces) as port:
            load = Load("127.0.0.1", port, b"mark", keep=True)
            await load.connect(4)
            seen = await load.closed_loop([REQUEST] * 50)
            assert seen.statuses == {"200": 50}
            assert seen.marked == 100
            assert seen.bodies == [b"mark,mark,"] * 50
            assert len(seen.waits_s) == 50
            await load.close()

    asyncio.run(play())


def test_an_open_loop_counts_waits_from_when_requests_were_due() -> None:
    """One connection, answers of 20 ms and a request every 10 ms: waits must pile up."""

    async def play() -> None:
        async with answering(pause_s=0.02) as port:
            load = Load("127.0.0.1", port)
            await load.connect(1)
            seen = await load.open_loop([REQUEST] * 10, rate=100.0)
            # The last was due after 90 ms, and ten answers take 200 ms at least.
            assert seen.waits_s[-1] >= 0.11
            assert seen.waits_s[0] < seen.waits_s[-1]
            await load.close()

    asyncio.run(play())


def test_an_open_loop_sends_at_its_rate() -> None:
    """A hundred requests at 500 a second take a fifth of a second at least."""

    async def play() -> None:
        async with answering() as port:
            load = Load("127.0.0.1", port)
            await load.connect(4)
            seen = await load.open_loop([REQUEST] * 100, rate=500.0)
            assert seen.seconds >= 99 / 500.0
            await load.close()

    asyncio.run(play())


def test_a_server_that_hangs_up_ends_the_load() -> None:
    """Nobody waits for answers that cannot come."""

    async def play() -> None:
        async with answering(leave_after=5) as port:
            load = Load("127.0.0.1", port)
            await load.connect(2)
            with pytest.raises(Stalled):
                await load.closed_loop([REQUEST] * 50)
            await load.close()

    asyncio.run(play())


def test_an_even_load_leaves_the_processor_alone_between_requests() -> None:
    """Two requests two fifths of a second apart take far less processor time than that."""

    async def play() -> None:
        async with answering() as port:
            load = Load("127.0.0.1", port)
            await load.connect(1)
            before_s = time.process_time()
            seen = await load.open_loop([REQUEST] * 2, rate=2.5)
            assert time.process_time() - before_s < 0.2
            assert seen.seconds >= 0.4
            await load.close()

    run(play())
