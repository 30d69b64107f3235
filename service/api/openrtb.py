"""The routes of the open standard: bid requests with a key, notices with the ticket they carry."""

from __future__ import annotations

import json
import re
import time
import zlib
from http import HTTPStatus
from typing import Any

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import require
from service.api.body import TooLarge, read_bytes
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.problems import problem
from service.api.stories import stories
from service.errors import NotFound
from service.exchanging import written
from service.feedback import Receipt
from service.openrtb.bodies import GZIP, BadBody, TooLong, parsed, unpacked
from service.openrtb.explaining import explain
from service.openrtb.mapping import Source
from service.openrtb.requests import BadRequest

router = direct_router()

VERSION = {"x-openrtb-version": "2.6"}
GZIP_BYTES_MIN = 1024  # A shorter answer fits one packet as it is.
_JSON = re.compile(r"application/(json|[a-z0-9.+-]+\+json)\s*(;.*)?", re.IGNORECASE)
_OTHER = dict.fromkeys(("bad_ticket", "no_such_line_item"), HTTPStatus.NOT_FOUND)
# Booked or kept for people to look at: whoever sent it must not send it again.
_DONE = {"quarantined", "loss_says_won"}


class _Malformed(ValueError):
    """What the standard answers with 400 and no content."""


@router.post(
    "/openrtb/{source}/bids",
    **described("Answer an OpenRTB 2.6 or 2.5 bid request of a source of the mapping.", "bid"),
)
async def post_bids(request: Request) -> Response:
    """Bids as an OpenRTB response, or one of the standard's ways not to bid."""
    arrived = time.monotonic()
    # Which line items bid is the mapping's choice, not the request's.
    await require(request, "bid", of_all=True)
    name, source = _source(request)
    try:
        body = await _body(request)
        found = await stories(request).exchange.answer(name, source, body, arrived)
    except (_Malformed, BadBody, BadRequest):
        return Response(status_code=400, headers=VERSION)
    answer = written(source, found, request.headers.get("x-openrtb-version", ""))
    if answer is None:
        return Response(status_code=204, headers=VERSION)
    return _packed(request, answer)


@router.post(
    "/openrtb/{source}/explain",
    **described("Say step by step what the mapping makes of a bid request.", "read"),
)
async def post_explain(request: Request) -> Response:
    """What the mapping makes of one request; no price is made and nothing is kept."""
    await require(request, "read", of_all=True)
    name, source = _source(request)
    try:
        body = await _body(request)
    except (_Malformed, BadBody):
        return Response(status_code=400, headers=VERSION)
    return answers.json_answer(explain(name, source, body))


@router.get("/openrtb/win/{ticket}", **described("Hear that a bid won. Its ticket is its key."))
@router.post("/openrtb/win/{ticket}", include_in_schema=False)
async def take_win(request: Request) -> Response:
    """Book a win."""
    return await _notice(request, "win")


@router.get("/openrtb/billed/{ticket}", **described("Hear that a bid is billed."))
@router.post("/openrtb/billed/{ticket}", include_in_schema=False)
async def take_billed(request: Request) -> Response:
    """Book a bill."""
    return await _notice(request, "billed")


@router.get("/openrtb/loss/{ticket}", **described("Hear that a bid lost, and why."))
@router.post("/openrtb/loss/{ticket}", include_in_schema=False)
async def take_loss(request: Request) -> Response:
    """Release a hold; only a loss on price teaches."""
    return await _notice(request, "loss")


def _source(request: Request) -> tuple[str, Source]:
    name = str(request.path_params["source"])
    source = getattr(request.app.state, "sources", {}).get(name)
    if source is None:
        raise NotFound("no_such_source", "The mapping names no such source.")
    return name, source


async def _body(request: Request) -> object:
    content_type = request.headers.get("content-type", "").strip()
    version = request.headers.get("x-openrtb-version", "2.").strip()
    if (content_type and not _JSON.fullmatch(content_type)) or not version.startswith("2."):
        raise _Malformed
    encoding = request.headers.get("content-encoding", "identity").strip().lower()
    bytes_max = edge(request).body_bytes_max
    raw = await read_bytes(request, bytes_max)
    if encoding in ("gzip", "x-gzip"):
        try:
            raw = unpacked(raw, bytes_max)
        except TooLong as error:
            detail = "The body unfolds to more than this call reads."
            raise TooLarge("body_too_large", detail, {"bytes_max": bytes_max}) from error
    elif encoding not in ("identity", ""):
        raise _Malformed
    return parsed(raw)


def _packed(request: Request, answer: dict[str, Any]) -> Response:
    body = json.dumps(answer, separators=(",", ":"), allow_nan=False).encode()
    headers = dict(VERSION)
    accepted = request.headers.get("accept-encoding", "").lower()
    if len(body) >= GZIP_BYTES_MIN and re.search(r"\bgzip\b(?!\s*;\s*q=0(\.0*)?\b)", accepted):
        stream = zlib.compressobj(level=1, wbits=GZIP)
        body = stream.compress(body) + stream.flush()
        headers["content-encoding"] = "gzip"
    return Response(body, media_type="application/json", headers=headers)


async def _notice(request: Request, kind: str) -> Response:
    ticket = str(request.path_params["ticket"])
    receipt = await stories(request).exchange.hear(kind, ticket, dict(request.query_params))
    if receipt is None or receipt.status != "refused" or receipt.code in _DONE:
        return Response(status_code=204)
    return _refused(receipt)


def _refused(receipt: Receipt) -> Response:
    code = receipt.code or "bad_notice"
    # Never 5xx for what can only fail again: the caller would send it for a minute.
    status = _OTHER.get(code, HTTPStatus.BAD_REQUEST)
    return problem(status, code, "The notice was not booked.")
