"""Templates, headers and files of the page, apart from what is shown: nothing here reads data."""

from __future__ import annotations

import gzip
import zlib
from functools import lru_cache
from importlib.resources import files
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from starlette.requests import Request
from starlette.responses import HTMLResponse, Response

from service.errors import NotFound
from service.watch.words import filters

# Scripts and styles come from files of ours only; the charting library draws under it too,
# once its own rules lie in a file as well.
POLICY = "; ".join(
    (
        *("default-src 'none'", "script-src 'self'", "style-src 'self'", "img-src 'self' data:"),
        *("connect-src 'self'", "form-action 'self'", "base-uri 'none'", "frame-ancestors 'none'"),
    )
)
HEADERS = {
    "Content-Security-Policy": POLICY,
    "X-Frame-Options": "DENY",
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Permissions-Policy": "camera=(), geolocation=(), microphone=()",
}
PRIVATE = {**HEADERS, "Cache-Control": "no-store"}
# Every address of a file carries the version of what is in it, so it may be kept for a year.
KEPT = {**HEADERS, "Cache-Control": "public, max-age=31536000, immutable"}
TYPES = {"css": "text/css", "js": "text/javascript", "png": "image/png"}
OURS = ("watch.css", "charts.css", "watch.js", "charts.js", "mark.png")
LIBRARY = "plotly.min.js"


def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("service.watch"),
        # Everything is escaped, whatever the ending of a template's name.
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters.update(filters())
    environment.globals["address"] = address
    return environment


def page(template: str, status_code: int = 200, **shown: Any) -> Response:
    """A page that is nobody's to keep."""
    text = _ENVIRONMENT.get_template(template).render(**shown)
    return HTMLResponse(text, status_code, headers=PRIVATE)


def address(name: str) -> str:
    """Where a file lies, with its version."""
    return f"/watch/files/{_version(name)}/{name}"


def file(request: Request, name: str) -> Response:
    """
    One of the few files that the page is made of, packed where the browser can unpack it.

    Raises:
        NotFound: It is none of them.
    """
    # A name out of a path must never choose a file by itself.
    if name not in (*OURS, LIBRARY):
        raise NotFound("not_found", "Not Found.")
    headers = {**KEPT, "Vary": "Accept-Encoding"}
    kind = TYPES[name.rpartition(".")[2]]
    if "gzip" in request.headers.get("accept-encoding", ""):
        packed = {**headers, "Content-Encoding": "gzip"}
        return Response(_packed(name), headers=packed, media_type=kind)
    return Response(_bytes(name), headers=headers, media_type=kind)


def _bytes(name: str) -> bytes:
    if name == LIBRARY:
        return (files("plotly") / "package_data" / name).read_bytes()
    return (files("service.watch") / "static" / name).read_bytes()


@lru_cache(maxsize=8)
def _packed(name: str) -> bytes:
    return gzip.compress(_bytes(name), mtime=0)


@lru_cache(maxsize=8)
def _version(name: str) -> str:
    # By its content and not by our release: a changed file is never shown stale.
    return f"{zlib.crc32(_bytes(name)):08x}"


_ENVIRONMENT = _environment()
