"""One header out of the bytes that came, apart because every bid asks for several."""

from __future__ import annotations

from starlette.requests import Request


def header(request: Request, name: bytes) -> str | None:
    """The first header of this name, in small letters, or None."""
    # A few comparisons of bytes; the framework's own map of headers is made anew for each request.
    for given, value in request.scope["headers"]:
        if given == name:
            return str(value, "latin-1")
    return None
