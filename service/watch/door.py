"""Who is looking: signing in and out, and the checks that every page and every form begins with."""

from __future__ import annotations

import secrets
import time
from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from functools import wraps
from typing import Any, Protocol, cast
from urllib.parse import parse_qsl, urlencode, urlsplit

from starlette.requests import Request
from starlette.responses import RedirectResponse, Response

from service.api.body import read_bytes
from service.api.problems import status_of
from service.errors import Forbidden, Malformed, NotFound, Refusal, StoreAway, no_such_line_item
from service.operating import Key, Operator
from service.watch.pages import PRIVATE, page
from service.watch.sessions import SESSION_S, Attempts, Seal, Session, begin, sees, sees_all
from service.watching import Watching

COOKIE, DOOR = "bidkeel_watch", "bidkeel_door"
FORM_BYTES_MAX = 128 * 1024
FIELDS_MAX = 50
KEY_CHARACTERS_MAX = 256
Handler = Callable[[Request], Awaitable[Response]]


class Stories(Protocol):
    """What the page needs of the running service, as app.py hangs it on `app.state.stories`."""

    @property
    def operator(self) -> Operator: ...

    @property
    def watching(self) -> Watching: ...

    @property
    def watch_secret(self) -> bytes: ...


@dataclass(frozen=True, slots=True)
class Viewer:
    """Whoever is signed in, and what that allows."""

    key: Key
    session: Session
    token: str

    @property
    def operates(self) -> bool:
        """Whether the buttons are theirs."""
        return self.key.allows("operate")

    @property
    def sees_all(self) -> bool:
        """Whether the key is limited to no line items."""
        return sees_all(self.key)

    @property
    def actor(self) -> str:
        """The name in the journal."""
        return f"{self.key.name} ({self.key.id}), watch page"

    def sees(self, line_item: str) -> bool:
        """Whether a line item is theirs to see."""
        return sees(self.key, line_item)


class SignedOut(Exception):
    """Nobody is signed in here, or no more."""


def stories(request: Request) -> Stories:
    """
    The running service behind this request.

    Raises:
        StoreAway: It is still starting, or stopping.
    """
    found = getattr(request.app.state, "stories", None)
    if found is None:
        raise StoreAway("the service is still starting")
    return cast(Stories, found)


def shown(handler: Handler) -> Handler:
    """Let what a page refuses leave as a page, and send whoever is signed out to the door."""

    @wraps(handler)
    async def wrapped(request: Request) -> Response:
        try:
            return await handler(request)
        except SignedOut:
            return _to_the_door(request)
        except Refusal as refusal:
            return _refused(status_of(refusal), refusal.detail)
        except StoreAway:
            detail = "The database did not answer. If you gave an order, perhaps it took effect: "
            return _refused(503, detail + "go back and send the same form again, it counts once.")

    return wrapped


async def viewer(request: Request) -> Viewer:
    """
    Who is signed in.

    Raises:
        SignedOut: Nobody, or their session or key has ended.
        Forbidden: The key may not read.
    """
    seal = seal_of(request)
    session = seal.read(request.cookies.get(COOKIE, ""), int(time.time()))
    key = None if session is None else await stories(request).watching.key(session.key_id)
    if session is None or key is None:
        raise SignedOut
    if not key.allows("read"):
        raise Forbidden("scope_missing", "This key may not read.", {"scope": "read"})
    return Viewer(key, session, seal.token(session.nonce))


async def operator(request: Request) -> tuple[Viewer, dict[str, str]]:
    """
    Who gives an order, and the form that they sent.

    Raises:
        Forbidden: The key may not operate, or the form came from elsewhere.
    """
    who, form = await viewer(request), await read_form(request)
    if not seal_of(request).token_fits(who.session.nonce, form.pop("token", "")):
        raise _from_elsewhere()
    require_operate(who)
    return who, form


def require_operate(who: Viewer) -> None:
    """
    Let through whoever may give orders.

    Raises:
        Forbidden: The key may only read.
    """
    if not who.operates:
        raise Forbidden("scope_missing", "This key may read, not operate.", {"scope": "operate"})


def line_item_of(request: Request, who: Viewer) -> str:
    """
    The line item in the path; one that is not theirs is as good as none.

    Raises:
        NotFound: No line item that this key may see.
    """
    name = str(request.path_params["line_item_id"])
    if not who.sees(name):
        raise no_such_line_item()
    return name


async def read_form(request: Request) -> dict[str, str]:
    """
    The fields of a form of ours.

    Raises:
        Forbidden: Another site sent it.
        Malformed: No form, or a field twice.
    """
    # Browsers say where a form stood; an old one that says nothing still needs the token. Not by
    # Origin, which is "null" without a referrer, and another host's name behind some proxies.
    if request.headers.get("sec-fetch-site", "same-origin") not in ("same-origin", "none"):
        raise _from_elsewhere()
    if not request.headers.get("content-type", "").startswith("application/x-www-form-urlencoded"):
        raise Malformed("bad_form", "This is no form of the watch page.")
    body = await read_bytes(request, FORM_BYTES_MAX)
    try:
        pairs = parse_qsl(
            body.decode("utf-8"), True, True, errors="strict", max_num_fields=FIELDS_MAX
        )
    except ValueError as error:
        raise Malformed("bad_form", "This is no form of the watch page.") from error
    fields = dict(pairs)
    if len(fields) != len(pairs):
        raise Malformed("bad_form", "A field came twice.")
    return fields


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
        return _door(request, onward, 403, "This form is too old. Please try again.")
    address, now_s = request.client.host if request.client else "", time.monotonic()
    if wait_s := attempts.wait_s(address, now_s):
        said = f"Too many tries. Please wait {wait_s} s."
        return _door(request, onward, 429, said, {"Retry-After": str(wait_s)})
    bearer = form.get("key", "").strip()
    key = None
    if 0 < len(bearer) <= KEY_CHARACTERS_MAX:
        key = await stories(request).operator.key_for(bearer)
    if key is None or not key.allows("read"):
        attempts.failed(address, now_s)
        # One sentence for both, or it would tell which keys there are.
        return _door(request, onward, 401, "No live key with the scope read has this text.")
    answer = RedirectResponse(onward, 303, headers=PRIVATE)
    _set(answer, request, COOKIE, seal.write(begin(key.id, int(time.time()))), SESSION_S)
    answer.delete_cookie(DOOR, path="/watch")
    return answer


@shown
async def post_sign_out(request: Request) -> Response:
    """End the session in this browser."""
    who, form = await viewer(request), await read_form(request)
    if not seal_of(request).token_fits(who.session.nonce, form.get("token", "")):
        raise _from_elsewhere()
    answer = RedirectResponse("/watch/sign-in", 303, headers=PRIVATE)
    answer.delete_cookie(COOKIE, path="/watch")
    return answer


def seal_of(request: Request) -> Seal:
    """The seal of this service's database."""
    return Seal(stories(request).watch_secret)


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


def _to_the_door(request: Request) -> Response:
    # What refreshes a page must not put the door into the middle of it.
    if request.headers.get("x-part"):
        return Response("signed out", 401, headers=PRIVATE, media_type="text/plain")
    onward = request.url.path if request.method == "GET" else "/watch"
    return RedirectResponse(f"/watch/sign-in?{urlencode({'next': onward})}", 303, headers=PRIVATE)


def _refused(status_code: int, detail: str) -> Response:
    return page("refused.html", status_code, detail=detail, who=None)


def _from_elsewhere() -> Forbidden:
    return Forbidden("foreign_form", "This form is too old or came from elsewhere.")


def _attempts(request: Request) -> Attempts:
    state: Any = request.app.state
    if not hasattr(state, "watch_attempts"):
        state.watch_attempts = Attempts()
    return cast(Attempts, state.watch_attempts)


def missing() -> NotFound:
    """The one refusal for what does not exist."""
    return NotFound("not_found", "Not Found.")
