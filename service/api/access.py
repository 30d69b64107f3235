"""Who may call what: one bearer key with scopes, apart so that every route asks the same way."""

from __future__ import annotations

import hmac
import re

from starlette.requests import Request

from service.api.edge import edge
from service.api.raw import header
from service.api.stories import Caller, started, stories
from service.errors import Forbidden, NotFound, Unauthenticated, no_such_line_item

FOREIGN = "foreign_line_item"  # In the count alone; the caller reads no_such_line_item.
# Our keys have 43 characters; what is far longer is not worth hashing.
_BEARER = re.compile(r"bearer +([!-~]{1,256})", re.IGNORECASE)


async def require(request: Request, scope: str, *, of_all: bool = False) -> Caller:
    """
    The key this request came with, if it has the scope; `admin` implies all.

    Args:
        of_all: The call concerns every line item, so a key limited to some may not make it.

    Raises:
        Unauthenticated: No bearer key, or none that we know.
        Forbidden: The key lacks the scope, or is limited to some line items.
        StoreAway: The key could not be looked up.
    """
    operator = stories(request).operator
    try:
        key = await operator.key_for(_bearer(request))
    except Unauthenticated as refusal:
        note_refusal(request, None, refusal.code)
        raise
    # Unknown, expired and ended keys get one sentence: which it was is nobody's business.
    if key is None:
        note_refusal(request, None, "unknown_key")
        raise Unauthenticated("unknown_key", "The key is unknown or has ended.")
    if not key.allows(scope):
        note_refusal(request, key, "scope_missing")
        raise Forbidden("scope_missing", "The key lacks the scope of this call.", {"scope": scope})
    if of_all and key.line_items is not None:
        note_refusal(request, key, "key_is_limited")
        raise Forbidden("key_is_limited", "The key is limited to some line items.")
    # Whoever reads a line item's name later holds it against this key.
    request.scope.setdefault("state", {})["caller"] = key
    return key


def reach(request: Request, *line_items: str) -> None:
    """
    Let the caller's key go on if these line items exist for it.

    Raises:
        NotFound: One does not; the answer is that for a line item that nobody has.
    """
    for name in line_items:
        if (refusal := out_of_reach(request, name)) is not None:
            raise refusal


def out_of_reach(request: Request, line_item: str) -> NotFound | None:
    """The refusal, counted, when this line item does not exist for the caller's key."""
    caller: Caller | None = getattr(request.state, "caller", None)
    if caller is None or caller.line_items is None or line_item in caller.line_items:
        return None
    note_refusal(request, caller, FOREIGN)
    return no_such_line_item()


def note_refusal(request: Request, caller: Caller | None, code: str) -> None:
    """Count a refusal under the route as it is written, never as it was called."""
    path = getattr(request.scope.get("route"), "path", "")
    who = "" if caller is None else caller.id
    stories(request).operator.admitting.refused(who, f"{request.method} {path}", code)


def require_health_key(request: Request) -> None:
    """
    Let through whoever may read health: everybody, unless the settings name a key.

    Raises:
        Unauthenticated: The settings name a key, and this is not it.
    """
    secret = edge(request).health_key
    if secret is None:
        return
    try:
        # In constant time, so that a guesser learns nothing from how long the refusal takes.
        if not hmac.compare_digest(_bearer(request), secret.get_secret_value()):
            raise Unauthenticated("unknown_key", "The key is unknown or has ended.")
    except Unauthenticated as refusal:
        # Before the service has started there is nobody to count.
        if started(request):
            note_refusal(request, None, refusal.code)
        raise


def actor(caller: Caller) -> str:
    """Who did it, for the journal; two keys may share a name, so the id stands beside it."""
    return f"{caller.name} ({caller.id})"


def _bearer(request: Request) -> str:
    matched = _BEARER.fullmatch(header(request, b"authorization") or "")
    if matched is None:
        raise Unauthenticated("no_key", "Send a key as Authorization: Bearer.")
    return matched.group(1)
