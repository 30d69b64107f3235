"""The few routes of bids and outcomes, reached past the framework's layers that they do not use.

Matching, exit stacks and telemetry cost a fifth of a bid. What a caller sees is the same: the very
same functions answer, under the same layers for ids and errors, and every other request goes the
framework's own way.
"""

from __future__ import annotations

from collections.abc import Awaitable, Callable

from fastapi import FastAPI
from starlette.middleware.errors import ServerErrorMiddleware
from starlette.requests import Request
from starlette.responses import Response
from starlette.types import ASGIApp, Receive, Scope, Send

from service.api.direct import Direct
from service.api.envelope import begun, named

Handler = Callable[[Request, Exception], Awaitable[Response]]

PATHS = ("/v1/bids", "/v1/bids/batch", "/v1/outcomes")


class Service(FastAPI):
    """The app, whose express routes are looked for first."""

    express: dict[str, ASGIApp] = {}  # noqa: RUF012 - Until its own are given to each app.

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Answer one request."""
        # Another method or spelling is the framework's to refuse.
        if scope["type"] == "http" and scope["method"] == "POST":
            quick = self.express.get(scope["path"])
            if quick is not None:
                scope["app"] = self
                await quick(scope, receive, send)
                return
        await super().__call__(scope, receive, send)


def hang(app: Service, answered: Callable[[int], None]) -> None:
    """Give the app its express routes, once its routes and its handlers of errors are there."""
    handlers: dict[type[Exception], Handler] = dict(app.exception_handlers)
    unexpected = handlers.pop(Exception, None)
    app.express = {
        route.path: ServerErrorMiddleware(_leaf(route, handlers, answered), handler=unexpected)
        for route in app.routes
        if isinstance(route, Direct) and route.path in PATHS
    }


def _leaf(
    route: Direct, handlers: dict[type[Exception], Handler], answered: Callable[[int], None]
) -> ASGIApp:
    foreseen = tuple(handlers)

    async def leaf(scope: Scope, receive: Receive, send: Send) -> None:
        # Refusals are counted under the route as it is written.
        scope["route"] = route
        name = begun(scope)
        request = Request(scope, receive)
        try:
            response = await route.endpoint(request)
        except foreseen as error:
            handler = next(handlers[kind] for kind in type(error).__mro__ if kind in handlers)
            response = await handler(request, error)
        status, headers = response.status_code, named(response.raw_headers, name)
        answered(status)
        # Told by hand, as these answers are whole: they neither stream nor leave work behind.
        await send({"type": "http.response.start", "status": status, "headers": headers})
        await send({"type": "http.response.body", "body": response.body})

    return leaf
