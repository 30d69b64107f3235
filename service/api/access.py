"""Who may call what: one bearer key with scopes, apart so that every route asks the same way."""

from __future__ import annotations

import hmac
import re

from starlette.requests import Request

from service.api.edge import edge
from service.api.stories import Caller, stories
from service.errors import Forbidden, Unauthenticated

# Our keys have 43 characters; what is far longer is not worth hashing.
_BEARER = re.compile(r"bearer +([!-~]{1,256})", re.IGNORECASE)


async def require(request: Request, scope: str) -> Caller:
    """
    The key this request came with, if it has the scope; `admin` implies all.

    Raises:
        Unauthenticated: No bearer key, or none that we know.
        Forbidden: The key lacks the scope.
        StoreAway: The key could not be looked up.
    """
    key = await stories(request).operator.key_for(_bearer(request))
    # Unknown and ended keys get one sentence: which of the two it was is nobody's business.
    if key is None:
        raise Unauthenticated("unknown_key", "The key is unknown or has ended.")
    if not key.allows(scope):
        raise Forbidden("scope_missing", "The key lacks the scope of this call.", {"scope": scope})
    return key


def require_health_key(request: Request) -> None:
    """
    Let through whoever may read health: everybody, unless the settings name a key.

    Raises:
        Unauthenticated: The settings name a key, and this is not it.
    """
    secret = edge(request).health_key
    if secret is None:
        return
    # In constant time, so that a guesser learns nothing from how long the refusal takes.
    if not hmac.compare_digest(_bearer(request), secret.get_secret_value()):
        raise Unauthenticated("unknown_key", "The key is unknown or has ended.")


def actor(caller: Caller) -> str:
    """Who did it, for the journal; two keys may share a name, so the id stands beside it."""
    return f"{caller.name} ({caller.id})"


def _bearer(request: Request) -> str:
    matched = _BEARER.fullmatch(request.headers.get("authorization", ""))
    if matched is None:
        raise Unauthenticated("no_key", "Send a key as Authorization: Bearer.")
    return matched.group(1)
