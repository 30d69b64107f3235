"""The balancer of the drills: who refuses or hangs up is passed by, whoever answers is believed."""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import AsyncIterator, Awaitable, Callable
from contextlib import asynccontextmanager

import pytest

from service.commands.balancer import CLOSED, REFUSED, Balancer
from service.commands.server_process import HOST, free_port
from service.commands.wire import Wire

pytestmark = pytest.mark.anyio
Handle = Callable[[asyncio.StreamReader, asyncio.StreamWriter], Awaitable[None]]


async def answers(reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
    """Say 503, which is an answer, as long as somebody asks."""
    with contextlib.suppress(asyncio.IncompleteReadError):
        while True:
            head = await reader.readuntil(b"\r\n\r\n")
            if head.startswith(b"POST"):
                await reader.readexactly(len(b"{}"))
            writer.write(b"HTTP/1.1 503 Service Unavailable\r\nContent-Length: 2\r\n\r\nno")
    writer.close()


async def hangs_up(reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
    """Read and say nothing, as a server that is leaving."""
    await reader.readuntil(b"\r\n\r\n")
    writer.close()


@asynccontextmanager
async def wired(handle: Handle | None) -> AsyncIterator[Wire]:
    """A wire to a small server, or to a port where nobody listens."""
    if handle is None:
        async with Wire(HOST, free_port(), "key") as wire:
            yield wire
        return
    async with await asyncio.start_server(handle, HOST, 0) as server:
        async with Wire(HOST, server.sockets[0].getsockname()[1], "key") as wire:
            yield wire


async def test_the_next_one_takes_what_others_did_not() -> None:
    """A refusal and a hang-up are passed on and counted; the answer is the one that came."""
    async with wired(None) as nobody, wired(hangs_up) as leaving, wired(answers) as serving:
        balancer = Balancer([serving, nobody, leaving])
        assert (await balancer.post("/v1/bids", {})).status == 503
        assert balancer.moved == {REFUSED: 1, CLOSED: 1}


async def test_who_refused_is_out_until_brought_in() -> None:
    """After one refusal nothing more is sent there, until it is said to be back."""
    async with wired(None) as nobody, wired(answers) as serving:
        balancer = Balancer([serving, nobody])
        for _ in range(6):
            await balancer.get("/health/ready")
        assert balancer.moved[REFUSED] == 1
        balancer.bring_in(1)
        for _ in range(6):
            await balancer.get("/health/ready")
        assert balancer.moved[REFUSED] == 2


async def test_with_nobody_left_the_request_fails() -> None:
    """A failure is not hidden: it is what the drill counts."""
    async with wired(None) as nobody, wired(None) as either:
        balancer = Balancer([nobody, either])
        with pytest.raises(ConnectionRefusedError):
            await balancer.post("/v1/bids", {})
        balancer.bring_in(0)
        balancer.take_out(0)
        with pytest.raises(ConnectionRefusedError):
            await balancer.get("/health/ready")
        assert balancer.moved[REFUSED] == 2
