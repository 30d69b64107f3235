"""A request's body as one JSON object, apart because it reads bytes that nobody has checked yet."""

from __future__ import annotations

import json
import re
from decimal import Decimal, InvalidOperation
from typing import NoReturn

import jiter
from starlette.requests import ClientDisconnect, Request

from service.api.raw import header
from service.errors import Malformed, Refusal

_JSON_TYPE = re.compile(
    r'application/(json|[a-z0-9.+-]+\+json)\s*(;\s*charset\s*=\s*"?utf-?8"?\s*)?;?\s*',
    re.IGNORECASE,
)


class BadJson(Malformed):
    """The bytes are not one JSON object of the strict kind."""

    def __init__(self, detail: str) -> None:
        super().__init__("bad_json", detail)


class TooLarge(Refusal):
    """The body is longer than this route reads."""


class NotJson(Refusal):
    """The headers say that the body is something else than plain JSON."""


async def read_object(request: Request, bytes_max: int) -> dict[str, object]:
    """
    Read the body as one JSON object; numbers with a point come as Decimal.

    Raises:
        NotJson: Another content type, or an encoded body.
        TooLarge: More than `bytes_max` bytes, announced or sent.
        BadJson: Not JSON, a key twice, NaN or Infinity, or no object at the top.
    """
    _check_headers(request, bytes_max)
    return parse_object(await read_bytes(request, bytes_max))


def parse_object(body: bytes) -> dict[str, object]:
    """
    Parse bytes as one strict JSON object.

    Raises:
        BadJson: As for `read_object`.
    """
    try:
        parsed = jiter.from_json(
            body, allow_inf_nan=False, catch_duplicate_keys=True, float_mode="decimal"
        )
    # What the quick parser refuses may be one odd text in one row, which must not spoil the others.
    except ValueError:
        parsed = _parsed(body)
    if not isinstance(parsed, dict):
        raise BadJson("The body must be a JSON object.")
    return parsed


def _check_headers(request: Request, bytes_max: int) -> None:
    content_type = header(request, b"content-type") or ""
    plain = content_type in ("", "application/json")
    if not plain and not _JSON_TYPE.fullmatch(content_type.strip()):
        raise NotJson("not_json", "The content type must be application/json in UTF-8.")
    # A few encoded bytes may unfold to gigabytes, so nothing encoded is read at all.
    if (header(request, b"content-encoding") or "identity").strip().lower() != "identity":
        raise NotJson("encoded_body", "Send the body without a content encoding.")
    announced = header(request, b"content-length") or ""
    # By its length first, as int() itself refuses thousands of digits with an error.
    if announced.isdecimal() and (len(announced) > 18 or int(announced) > bytes_max):
        raise _too_large(bytes_max)


async def read_bytes(request: Request, bytes_max: int) -> bytes:
    """
    The bytes of a body as they came.

    Raises:
        TooLarge: More than `bytes_max` of them.
    """
    pieces, length, more = list[bytes](), 0, True
    while more:
        # Asked for by hand, as most bodies are one piece and the framework's stream is slow.
        message = await request.receive()
        if message["type"] == "http.disconnect":
            raise ClientDisconnect
        # Counted as it comes: the announced length may be missing, or a lie.
        pieces.append(message.get("body", b""))
        length += len(pieces[-1])
        if length > bytes_max:
            raise _too_large(bytes_max)
        more = message.get("more_body", False)
    return b"".join(pieces)


def _too_large(bytes_max: int) -> TooLarge:
    return TooLarge(
        "body_too_large", "The body is longer than this call reads.", {"bytes_max": bytes_max}
    )


def _parsed(body: bytes) -> object:
    try:
        return _DECODER.decode(body.decode("utf-8"))
    # Brackets nested too deeply end in RecursionError, and odd exponents in InvalidOperation.
    except (ValueError, RecursionError, InvalidOperation) as error:
        raise BadJson("The body is not JSON in UTF-8.") from error


def _constant(_name: str) -> NoReturn:
    raise BadJson("NaN and Infinity are no JSON numbers.")


def _unique(pairs: list[tuple[str, object]]) -> dict[str, object]:
    members = dict(pairs)
    # The parser alone would keep the last of two, and nobody knows which one was meant.
    if len(members) != len(pairs):
        raise BadJson("An object has the same key twice.")
    return members


# Integers stay with the interpreter's own limit of 4,300 digits and numbers with a point with
# Decimal itself: a hook of ours for each number would hold up the event loop on a long body.
_DECODER = json.JSONDecoder(
    parse_float=Decimal, parse_constant=_constant, object_pairs_hook=_unique
)
