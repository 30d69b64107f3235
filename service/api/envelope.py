"""Around every request: its id, from the first line of the log to the header of the answer.

A plain ASGI layer, since one that waits for whole answers would cost each bid a task.
"""

from __future__ import annotations

from collections.abc import Awaitable, Callable, Iterable

from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service import request_ids

_HEADER = request_ids.HEADER.lower().encode()


class Envelope:
    """
    Names each request and counts its answer.

    Args:
        answered: Told the status of every answer.
    """

    def __init__(self, app: ASGIApp, answered: Callable[[int], None]) -> None:
        self._app, self._answered = app, answered

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Hand one request on, and its answer back with the id in it."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        name = request_ids.begin(_offered(scope["headers"]))
        answered = self._answered

        def send_named(message: Message) -> Awaitable[None]:
            if message["type"] == "http.response.start":
                # A problem names it by itself.
                kept = [pair for pair in message["headers"] if pair[0] != _HEADER]
                message["headers"] = [*kept, (_HEADER, name.encode())]
                answered(message["status"])
            return send(message)

        await self._app(scope, receive, send_named)


def _offered(headers: Iterable[tuple[bytes, bytes]]) -> str | None:
    """The id that the request came with; read from the bytes, since every bid passes here."""
    for name, value in headers:
        if name == _HEADER:
            return value.decode("latin-1")
    return None
