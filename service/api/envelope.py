"""Around every request: its id, from the first line of the log to the header of the answer.

A plain ASGI layer, since one that waits for whole answers would cost each bid a task.
"""

from __future__ import annotations

from collections.abc import Awaitable, Callable, Iterable

from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service import request_ids
from service.api.raw import headers

Pair = tuple[bytes, bytes]

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
        name = begun(scope)
        answered = self._answered

        def send_named(message: Message) -> Awaitable[None]:
            if message["type"] == "http.response.start":
                message["headers"] = named(message["headers"], name)
                answered(message["status"])
            return send(message)

        await self._app(scope, receive, send_named)


def begun(scope: Scope) -> bytes:
    """Name the request at hand: as its headers offer, if that is sane, else anew."""
    offered = headers(scope).get(_HEADER)
    return request_ids.begin(None if offered is None else offered.decode("latin-1")).encode()


def named(pairs: Iterable[Pair], name: bytes) -> list[Pair]:
    """The headers of an answer with the name of its request."""
    # A problem names it by itself.
    return [*[pair for pair in pairs if pair[0] != _HEADER], (_HEADER, name)]
