"""The lean HTTP client keeps its connections, and a broken answer is an error, never a guess."""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator, Callable, Coroutine
from contextlib import asynccontextmanager
from typing import Any

import pytest

from service.commands.wire import Reply, Wire

GOOD = b'HTTP/1.1 200 OK\r\ncontent-length: 6\r\n\r\n["ok"]'


class Listener:
    """Answers each request with the next of its answers; an empty one closes the connection."""

    def __init__(self, *answers: bytes) -> None:
        self.answers = list(answers)
        self.requests: list[tuple[str, bytes]] = []
        self.served: list[asyncio.Task[None] | None] = []

    @property
    def connections(self) -> int:
        """How many connections were opened."""
        return len(self.served)

    async def serve(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        """Take requests on one connection until there is an empty answer."""
        self.served.append(asyncio.current_task())
        while self.answers and (head := await self._head(reader)):
            length = int(head.partition("Content-Length: ")[2].partition("\r\n")[0] or 0)
            self.requests.append((head, await reader.readexactly(length)))
            answer = self.answers.pop(0)
            writer.write(answer)
            if not answer.endswith(b"]"):
                break
        writer.close()
        await writer.wait_closed()

    async def _head(self, reader: asyncio.StreamReader) -> str:
        try:
            return (await reader.readuntil(b"\r\n\r\n")).decode()
        except asyncio.IncompleteReadError:
            return ""


@asynccontextmanager
async def wired(listener: Listener) -> AsyncIterator[Wire]:
    """Open a wire to the listener."""
    server = await asyncio.start_server(listener.serve, "127.0.0.1", 0)
    port = server.sockets[0].getsockname()[1]
    async with server:
        async with Wire("127.0.0.1", port, "secret") as wire:
            yield wire
        await asyncio.gather(*(task for task in listener.served if task))


def ask(listener: Listener, *asks: Callable[[Wire], Coroutine[Any, Any, Reply]]) -> list[Reply]:
    """Ask the listener one thing after the other."""

    async def asking() -> list[Reply]:
        async with wired(listener) as wire:
            return [await one(wire) for one in asks]

    return asyncio.run(asking())


def test_a_body_goes_out_as_json_with_the_key() -> None:
    """The length is stated, and the answer comes back whole."""
    listener = Listener(GOOD)
    replies = ask(listener, lambda wire: wire.post("/v1/bids", {"name": "Gärtnerei"}))
    head, body = listener.requests[0]
    assert replies == [Reply(200, b'["ok"]')]
    assert head.startswith("POST /v1/bids HTTP/1.1\r\n")
    assert "\r\nAuthorization: Bearer secret\r\n" in head
    assert json.loads(body) == {"name": "Gärtnerei"}


def test_one_connection_serves_one_request_after_the_other() -> None:
    """Only requests at the same moment need more of them."""
    listener = Listener(GOOD, GOOD, GOOD)
    ask(listener, *[lambda wire: wire.get("/health/ready")] * 3)
    assert (len(listener.requests), listener.connections) == (3, 1)


def test_requests_at_the_same_moment_do_not_mix() -> None:
    """Each has a connection of its own."""
    listener = Listener(*[GOOD] * 20)

    async def asking() -> list[Reply]:
        async with wired(listener) as wire:
            return list(await asyncio.gather(*(wire.get(f"/{n}") for n in range(20))))

    assert asyncio.run(asking()) == [Reply(200, b'["ok"]')] * 20
    assert listener.connections == 20


def test_a_status_other_than_200_is_an_answer() -> None:
    """What it means is for the caller to say."""
    listener = Listener(b"HTTP/1.1 503 Service Unavailable\r\nContent-Length: 4\r\n\r\naway")
    assert ask(listener, lambda wire: wire.get("/")) == [Reply(503, b"away")]


def test_a_connection_that_the_server_closed_is_not_used_again() -> None:
    """The next request opens another."""
    listener = Listener(b"HTTP/1.1 200 OK\r\nContent-Length: 2\r\n\r\n{}", GOOD)

    async def asking() -> Reply:
        async with wired(listener) as wire:
            await wire.get("/")
            await asyncio.sleep(0.05)
            return await wire.get("/")

    assert asyncio.run(asking()) == Reply(200, b'["ok"]')
    assert listener.connections == 2


@pytest.mark.parametrize("answer", [b"", b"HTTP/1.1 200", GOOD[:-3]])
def test_an_answer_that_breaks_off_is_an_error(answer: bytes) -> None:
    """The request may or may not have been done; nobody may take half an answer for one."""
    with pytest.raises(ConnectionResetError, match="closed before its answer was whole"):
        ask(Listener(answer), lambda wire: wire.get("/"))


def test_an_answer_without_a_length_is_an_error() -> None:
    """Our server states one, so this is not our server."""
    with pytest.raises(ConnectionError, match="without a stated length"):
        ask(Listener(b"HTTP/1.1 200 OK\r\n\r\n{}"), lambda wire: wire.get("/"))


def test_nobody_there_is_an_error() -> None:
    """A port that refuses is an OSError like every other failure of the wire."""

    async def asking() -> Reply:
        async with Wire("127.0.0.1", 9, "secret") as wire:
            return await wire.get("/")

    with pytest.raises(OSError, match="9"):
        asyncio.run(asking())
