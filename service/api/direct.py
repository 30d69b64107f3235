"""Routes whose function takes the request and gives the response, apart because they skip a step.

The framework fills in a function's parameters from the request and checks what it returns; ours
read the request themselves, so that work would only make a price come later.
"""

from __future__ import annotations

from typing import Any

from fastapi import APIRouter
from fastapi.routing import APIRoute
from starlette.routing import request_response


class Direct(APIRoute):
    """A route that hands the request to its function as it came; described like any other."""

    def __init__(self, path: str, endpoint: Any, **described: Any) -> None:
        super().__init__(path, endpoint, **described)
        self.app = request_response(endpoint)


def direct_router() -> APIRouter:
    """An empty router of such routes."""
    return APIRouter(route_class=Direct)
