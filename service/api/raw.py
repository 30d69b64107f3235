"""Headers out of the bytes that came, kept with the request because every bid asks for several."""

from __future__ import annotations

from starlette.requests import Request
from starlette.types import Scope

_KEPT = "bidkeel.headers"


def header(request: Request, name: bytes) -> str | None:
    """The first header of this name, in small letters, or None."""
    value = headers(request.scope).get(name)
    return None if value is None else str(value, "latin-1")


def headers(scope: Scope) -> dict[bytes, bytes]:
    """The first header of each name."""
    kept: dict[bytes, bytes] | None = scope.get(_KEPT)
    if kept is None:
        # From the end, so that of two of one name the first one stays.
        kept = scope[_KEPT] = dict(reversed(scope["headers"]))
    return kept
