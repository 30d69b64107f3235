"""Headers and query parameters that the routes read, each with its limits."""

from __future__ import annotations

import re

from starlette.requests import Request

from service.api.access import reach
from service.api.forms.fields import ID, PRINTABLE
from service.api.forms.reading import bad_field
from service.api.problems import PreconditionMissing
from service.errors import Stale, no_such_line_item

LIMIT_DEFAULT, LIMIT_MAX = 50, 200

# So many digits always fit the 64 bits of the column.
_VERSION = re.compile(r'"([0-9]{1,18})"')
_LIMIT = re.compile(r"[0-9]{1,4}")
_NUMBER = re.compile(r"[0-9]{1,15}")


def etag(version: int) -> str:
    """The version of a line item as an entity tag."""
    return f'"{version}"'


def if_match(request: Request) -> int:
    """
    The version that a change is meant for.

    Raises:
        PreconditionMissing: There is no If-Match.
        Stale: It is not one version as we give them, so it cannot be the current one.
    """
    header = request.headers.get("if-match")
    if header is None:
        raise PreconditionMissing("if_match_missing", "Send the version you read as If-Match.")
    # Neither a list nor a star is taken: a change is meant for the one version that was read.
    matched = _VERSION.fullmatch(header.strip())
    if matched is None:
        raise Stale("stale", "If-Match must be one ETag of this line item, with its quotes.")
    return int(matched.group(1))


def idempotency(request: Request) -> dict[str, str]:
    """
    The key under which a repeat of this call takes effect once, as a keyword for the story.

    Raises:
        Malformed: It is not 1 to 64 printable ASCII characters.
    """
    header = request.headers.get("idempotency-key")
    if header is None:
        return {}
    if not PRINTABLE.fullmatch(header):
        raise bad_field("Idempotency-Key", "It must be 1 to 64 printable ASCII characters.")
    return {"idempotency": header}


def line_item_id(request: Request) -> str:
    """
    The line item that the path names, if it exists for the caller's key.

    Raises:
        NotFound: No line item can have this id, or the key is limited to others.
    """
    # An impossible id is answered like an unknown one and never reaches the database.
    name = str(request.path_params["line_item_id"])
    if not ID.fullmatch(name):
        raise no_such_line_item()
    reach(request, name)
    return name


def page(request: Request) -> tuple[str | None, int]:
    """
    After which id a list goes on, and how many it may hold.

    Raises:
        Malformed: Another parameter, one twice, no id, or a limit outside 1 to 200.
    """
    # A parameter that is misspelt would otherwise give the first page for ever.
    given = request.query_params
    if set(given) - {"after", "limit"} or len(given.multi_items()) != len(given):
        raise bad_field("query", "The parameters are after and limit, once each.")
    after, limit = given.get("after"), given.get("limit", str(LIMIT_DEFAULT))
    if after is not None and not ID.fullmatch(after):
        raise bad_field("after", "It must be the id of a line item.")
    if not _LIMIT.fullmatch(limit) or not 1 <= int(limit) <= LIMIT_MAX:
        raise bad_field("limit", f"It must be a whole number from 1 to {LIMIT_MAX}.")
    return after, int(limit)


def numbered_page(request: Request) -> tuple[int | None, int]:
    """
    Before which number a list goes on, newest first, and how many it may hold.

    Raises:
        Malformed: Another parameter, one twice, no number, or a limit outside 1 to 200.
    """
    given = request.query_params
    if set(given) - {"before", "limit"} or len(given.multi_items()) != len(given):
        raise bad_field("query", "The parameters are before and limit, once each.")
    before, limit = given.get("before"), given.get("limit", str(LIMIT_DEFAULT))
    if before is not None and not _NUMBER.fullmatch(before):
        raise bad_field("before", "It must be the number of a row.")
    if not _LIMIT.fullmatch(limit) or not 1 <= int(limit) <= LIMIT_MAX:
        raise bad_field("limit", f"It must be a whole number from 1 to {LIMIT_MAX}.")
    return None if before is None else int(before), int(limit)
