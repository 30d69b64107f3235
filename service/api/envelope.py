"""Around every request: its id, from the first line of the log to the header of the answer.

A plain ASGI layer, since one that waits for whole answers would cost each bid a task.
"""

from __future__ import annotations

from collections.abc import Callable

from starlette.datastructures import Headers, MutableHeaders
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service import request_ids


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
        name = request_ids.begin(Headers(scope=scope).get(request_ids.HEADER))

        async def send_named(message: Message) -> None:
            if message["type"] == "http.response.start":
                MutableHeaders(scope=message)[request_ids.HEADER] = name
                self._answered(message["status"])
            await send(message)

        await self._app(scope, receive, send_named)
