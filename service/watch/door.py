"""Who is looking: the checks that every page and every form begins with."""

from __future__ import annotations

import time
from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from functools import wraps
from typing import Protocol, cast
from urllib.parse import parse_qsl, urlencode

from starlette.requests import Request
from starlette.responses import RedirectResponse, Response

from service.api.access import FOREIGN, note_refusal
from service.api.body import read_bytes
from service.api.problems import status_of
from service.api.stories import started
from service.errors import Forbidden, Malformed, NotFound, Refusal, StoreAway, no_such_line_item
from service.operating import Key, Operator
from service.rehearsing import Rehearsals
from service.watch.pages import PRIVATE, page
from service.watch.sessions import Seal, Session
from service.watching import Watching

COOKIE = "bidkeel_watch"
FORM_BYTES_MAX = 128 * 1024
FIELDS_MAX = 50
Handler = Callable[[Request], Awaitable[Response]]


class Stories(Protocol):
    """What the page needs of the running service, as app.py hangs it on `app.state.stories`."""

    @property
    def operator(self) -> Operator: ...

    @property
    def rehearsals(self) -> Rehearsals: ...

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
        return self.key.line_items is None

    @property
    def actor(self) -> str:
        """The name in the journal."""
        return f"{self.key.name} ({self.key.id}), watch page"

    def sees(self, line_item: str) -> bool:
        """Whether a line item is theirs to see."""
        return self.key.reaches(line_item)


class SignedOut(Exception):
    """Nobody is signed in here, or no more; its code says which in the count of refusals."""

    def __init__(self, code: str) -> None:
        super().__init__(code)
        self.code = code


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
        except SignedOut as refusal:
            count(request, refusal.code)
            return _to_the_door(request)
        except Refusal as refusal:
            # Who may do what is counted like the calls of the API; mistakes in a form are not.
            if isinstance(refusal, Forbidden):
                count(request, refusal.code)
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
        raise SignedOut("session_ended" if COOKIE in request.cookies else "no_key")
    request.state.caller = key
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
        raise from_elsewhere()
    require_operate(who)
    return who, form


def require_all(who: Viewer) -> None:
    """
    Let through whoever may give orders over all line items.

    Raises:
        Forbidden: The key may only read, or is limited to some of them.
    """
    require_operate(who)
    if not who.sees_all:
        raise Forbidden("key_is_limited", "This key is limited to some line items.")


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
        count(request, FOREIGN)
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
        raise from_elsewhere()
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


def seal_of(request: Request) -> Seal:
    """The seal of this service's database."""
    return Seal(stories(request).watch_secret)


def _to_the_door(request: Request) -> Response:
    # What refreshes a page must not put the door into the middle of it.
    if request.headers.get("x-part"):
        return Response("signed out", 401, headers=PRIVATE, media_type="text/plain")
    onward = request.url.path if request.method == "GET" else "/watch"
    return RedirectResponse(f"/watch/sign-in?{urlencode({'next': onward})}", 303, headers=PRIVATE)


def _refused(status_code: int, detail: str) -> Response:
    return page("refused.html", status_code, detail=detail, who=None)


def count(request: Request, code: str) -> None:
    """Count a refusal under the key of whoever is signed in, or under none."""
    if started(request):
        note_refusal(request, getattr(request.state, "caller", None), code)


def from_elsewhere() -> Forbidden:
    """The refusal of a form that is none of this session's."""
    return Forbidden("foreign_form", "This form is too old or came from elsewhere.")


def missing() -> NotFound:
    """The one refusal for what does not exist."""
    return NotFound("not_found", "Not Found.")
