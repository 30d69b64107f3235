"""Signing in by key and out again, apart from the checks of whoever is signed in."""

from __future__ import annotations

import secrets
import time
from typing import Any, cast
from urllib.parse import urlsplit

from starlette.requests import Request
from starlette.responses import RedirectResponse, Response

from service.watch.door import (
    COOKIE,
    count,
    from_elsewhere,
    read_form,
    seal_of,
    shown,
    stories,
    viewer,
)
from service.watch.pages import PRIVATE, page
from service.watch.sessions import Attempts, begin

DOOR = "bidkeel_door"
KEY_CHARACTERS_MAX = 256


@shown
async def get_sign_in(request: Request) -> Response:
    """The form that asks for a key."""
    return _door(request, _next(request.query_params.get("next", "")))


@shown
async def post_sign_in(request: Request) -> Response:
    """Begin a session when the key may read."""
    form, attempts = await read_form(request), _attempts(request)
    onward, seal = _next(form.get("next", "")), seal_of(request)
    nonce = request.cookies.get(DOOR, "")
    if not nonce or not seal.token_fits(f"door {nonce}", form.get("token", "")):
        count(request, "foreign_form")
        return _door(request, onward, 403, "This form is too old. Please try again.")
    address, now_s = request.client.host if request.client else "", time.monotonic()
    if wait_s := attempts.wait_s(address, now_s):
        count(request, "too_many_tries")
        said = f"Too many tries. Please wait {wait_s} s."
        return _door(request, onward, 429, said, {"Retry-After": str(wait_s)})
    bearer = form.get("key", "").strip()
    key = None
    if 0 < len(bearer) <= KEY_CHARACTERS_MAX:
        key = await stories(request).operator.key_for(bearer)
    if key is None or not key.allows("read"):
        attempts.failed(address, now_s)
        request.state.caller = key
        count(request, "unknown_key" if key is None else "scope_missing")
        # One sentence for both, or it would tell which keys there are.
        return _door(request, onward, 401, "No live key with the scope read has this text.")
    answer = RedirectResponse(onward, 303, headers=PRIVATE)
    now = int(time.time())
    session = begin(key.id, now, key.until_ms)
    _set(answer, request, COOKIE, seal.write(session), session.ends_s - now)
    answer.delete_cookie(DOOR, path="/watch")
    return answer


@shown
async def post_sign_out(request: Request) -> Response:
    """End the session in this browser."""
    who, form = await viewer(request), await read_form(request)
    if not seal_of(request).token_fits(who.session.nonce, form.get("token", "")):
        raise from_elsewhere()
    answer = RedirectResponse("/watch/sign-in", 303, headers=PRIVATE)
    answer.delete_cookie(COOKIE, path="/watch")
    return answer


def _door(
    request: Request,
    onward: str,
    status_code: int = 200,
    problem: str = "",
    headers: dict[str, str] | None = None,
) -> Response:
    nonce = secrets.token_hex(16)
    token = seal_of(request).token(f"door {nonce}")
    answer = page("sign_in.html", status_code, token=token, next=onward, problem=problem, who=None)
    answer.headers.update(headers or {})
    _set(answer, request, DOOR, nonce, 3600)
    return answer


def _set(answer: Response, request: Request, name: str, text: str, seconds: int) -> None:
    answer.set_cookie(
        name,
        text,
        max_age=seconds,
        path="/watch",
        secure=request.url.scheme == "https",
        httponly=True,
        samesite="strict",
    )


def _next(wanted: str) -> str:
    """A place on the watch page to go on to; anything else would send people to strangers."""
    parts = urlsplit(wanted)
    ours = parts.path == "/watch" or parts.path.startswith("/watch/")
    plain = wanted.isascii() and wanted.isprintable() and "\\" not in wanted
    return wanted if ours and plain and not parts.scheme and not parts.netloc else "/watch"


def _attempts(request: Request) -> Attempts:
    state: Any = request.app.state
    if not hasattr(state, "watch_attempts"):
        state.watch_attempts = Attempts()
    return cast(Attempts, state.watch_attempts)
