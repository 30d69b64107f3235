"""A lean HTTP client for one address, apart because a general one costs more than the service.

On two cores the exchange of the demo must not eat the time of the server that it drives. This
client speaks just what our own server answers with: HTTP/1.1, kept connections, bodies of a
stated length.
"""

from __future__ import annotations

import asyncio
import contextlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from types import TracebackType
from typing import Self

TIMEOUT_S = 30.0
_HEADERS_BYTES_MAX = 65_536


@dataclass(frozen=True, slots=True)
class Reply:
    """One answer: its status and its body."""

    status: int
    content: bytes


class Wire:
    """
    Kept connections to one server.

    Args:
        host: Its name or number.
        port: Where it listens.
        key: Sent as the bearer of every request.
    """

    def __init__(self, host: str, port: int, key: str) -> None:
        self.host, self.port = host, port
        self._head = f"Host: {host}:{port}\r\nAuthorization: Bearer {key}\r\n"
        self._idle: list[_Connection] = []

    async def __aenter__(self) -> Self:
        return self

    async def __aexit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        while self._idle:
            await self._idle.pop().close()

    async def get(self, path: str) -> Reply:
        """
        Fetch a path.

        Raises:
            OSError: No connection, or it broke before the answer was whole.
            TimeoutError: No answer within `TIMEOUT_S` seconds.
        """
        return await self._ask(f"GET {path} HTTP/1.1\r\n{self._head}\r\n".encode())

    async def post(self, path: str, body: Mapping[str, object]) -> Reply:
        """Send a JSON body to a path; errors as `get`."""
        content = json.dumps(body, separators=(",", ":")).encode()
        head = (
            f"POST {path} HTTP/1.1\r\n{self._head}"
            f"Content-Type: application/json\r\nContent-Length: {len(content)}\r\n\r\n"
        )
        return await self._ask(head.encode() + content)

    async def _ask(self, request: bytes) -> Reply:
        async with asyncio.timeout(TIMEOUT_S):
            connection = await self._kept() or await _Connection.to(self.host, self.port)
            try:
                reply = await connection.ask(request)
            # After a failure or a timeout the rest of an old answer may still come on it.
            except BaseException:
                await connection.close()
                raise
        self._idle.append(connection)
        return reply

    async def _kept(self) -> _Connection | None:
        while self._idle:
            connection = self._idle.pop()
            if connection.is_open:
                return connection
            await connection.close()
        return None


@dataclass(frozen=True, slots=True)
class _Connection:
    reader: asyncio.StreamReader
    writer: asyncio.StreamWriter

    @classmethod
    async def to(cls, host: str, port: int) -> Self:
        return cls(*await asyncio.open_connection(host, port, limit=_HEADERS_BYTES_MAX))

    @property
    def is_open(self) -> bool:
        return not (self.reader.at_eof() or self.writer.is_closing())

    async def ask(self, request: bytes) -> Reply:
        self.writer.write(request)
        try:
            head = await self.reader.readuntil(b"\r\n\r\n")
            content = await self.reader.readexactly(_length(head))
        except asyncio.IncompleteReadError:
            raise ConnectionResetError("The server closed before its answer was whole.") from None
        # The status follows the nine bytes of "HTTP/1.1 ".
        return Reply(int(head[9:12]), content)

    async def close(self) -> None:
        self.writer.close()
        with contextlib.suppress(OSError):
            await self.writer.wait_closed()


def _length(head: bytes) -> int:
    for line in head.split(b"\r\n"):
        name, _, text = line.partition(b":")
        if name.lower() == b"content-length":
            return int(text)
    raise ConnectionError("The server answered without a stated length.")
