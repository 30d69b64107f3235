"""The few routes of bids and outcomes, reached past the framework's layers that they do not use.

Matching, exit stacks and telemetry cost a fifth of a bid. What a caller sees is the same: the very
same functions answer, under the same layers for ids and errors, and every other request goes the
framework's own way.
"""

from __future__ import annotations

from collections.abc import Callable

from fastapi import FastAPI
from starlette.middleware.errors import ServerErrorMiddleware
from starlette.middleware.exceptions import ExceptionMiddleware
from starlette.requests import Request
from starlette.types import ASGIApp, Receive, Scope, Send

from service.api.direct import Direct
from service.api.envelope import Envelope

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
    handlers = dict(app.exception_handlers)
    unexpected = handlers.pop(Exception, None)
    app.express = {
        route.path: ServerErrorMiddleware(
            Envelope(ExceptionMiddleware(_leaf(route), handlers=handlers), answered=answered),
            handler=unexpected,
        )
        for route in app.routes
        if isinstance(route, Direct) and route.path in PATHS
    }


def _leaf(route: Direct) -> ASGIApp:
    async def leaf(scope: Scope, receive: Receive, send: Send) -> None:
        # Refusals are counted under the route as it is written.
        scope["route"] = route
        scope["path_params"] = {}
        response = await route.endpoint(Request(scope, receive, send))
        await response(scope, receive, send)

    return leaf
