"""The routes of keys and of those who were refused, for admins alone."""

from __future__ import annotations

import re
from typing import Any

from starlette.requests import Request
from starlette.responses import Response

from service.admitting import Wish
from service.api import answers
from service.api.access import actor, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.keys import KeyForm, RotateForm
from service.api.forms.orders import OrderForm
from service.api.forms.reading import read
from service.api.headers import idempotency, numbered_page
from service.api.stories import stories
from service.api.times import time_text
from service.errors import NotFound

router = direct_router()

PATH = "/v1/keys"
_ONCE = ("Idempotency-Key",)
_KEY = re.compile(r"[0-9a-f]{1,32}")
_TIMES = {
    "created_ms": "created_at",
    "ended_ms": "ended_at",
    "expires_ms": "expires_at",
    "used_ms": "last_used_at",
    "old_text_until_ms": "old_text_until",
    "minute_ms": "minute",
}


@router.get(PATH, **described("List every key, without its text.", "admin"))
async def get_keys(request: Request) -> Response:
    """Every key ever made, oldest first."""
    await require(request, "admin")
    rows = await stories(request).operator.admitting.keys()
    return _secret({"keys": [_plain(row) for row in rows]})


@router.post(
    PATH,
    status_code=201,
    **described("Make a key; its text is shown this once.", "admin", KeyForm, headers=_ONCE),
)
async def post_key(request: Request) -> Response:
    """Make a key, perhaps limited to line items, perhaps for a time."""
    caller, once = await require(request, "admin"), idempotency(request)
    form = read(KeyForm, await read_object(request, edge(request).body_bytes_max))
    # Sorted, so that a repeat which names them in another order is still the same call.
    named = None if form.line_items is None else tuple(sorted(set(form.line_items)))
    wish = Wish(form.name, tuple(sorted(set(form.scopes))), named, form.expires_at)
    admitting = stories(request).operator.admitting
    return _secret(_plain(await admitting.add(wish, form.reason, actor(caller), **once)), 201)


@router.post(PATH + "/{key_id}/end", **described("End a key.", "admin", OrderForm, headers=_ONCE))
async def post_end(request: Request) -> Response:
    """End a key; no worker knows it any more within a second."""
    caller, once = await require(request, "admin"), idempotency(request)
    form = read(OrderForm, await read_object(request, edge(request).body_bytes_max))
    admitting = stories(request).operator.admitting
    done = await admitting.end(_key_id(request), form.reason, actor(caller), **once)
    return _secret(_plain(done))


@router.post(
    PATH + "/{key_id}/rotate",
    **described("Give a key a new text, shown this once.", "admin", RotateForm, headers=_ONCE),
)
async def post_rotate(request: Request) -> Response:
    """A new text for the same key; the old one works until the overlap is over."""
    caller, once = await require(request, "admin"), idempotency(request)
    form = read(RotateForm, await read_object(request, edge(request).body_bytes_max))
    who, overlap_ms = actor(caller), form.overlap_s * 1000
    admitting = stories(request).operator.admitting
    done = await admitting.rotate(_key_id(request), overlap_ms, form.reason, who, **once)
    return _secret(_plain(done))


@router.get(
    "/v1/refusals",
    **described("Read who was not let in.", "admin", query=("before", "limit")),
)
async def get_refusals(request: Request) -> Response:
    """Counts by minute, key, route and code, newest first."""
    await require(request, "admin")
    before, limit = numbered_page(request)
    rows = await stories(request).operator.admitting.refusals(before, limit)
    further = rows[-1]["number"] if len(rows) == limit else None
    return answers.json_answer({"refusals": [_plain(row) for row in rows], "next": further})


def _plain(row: dict[str, Any]) -> dict[str, Any]:
    return {
        _TIMES.get(name, name): time_text(value) if name in _TIMES and value is not None else value
        for name, value in row.items()
    }


def _secret(members: object, status_code: int = 200) -> Response:
    """An answer that no cache on the way may keep."""
    return answers.json_answer(members, status_code, {"Cache-Control": "no-store"})


def _key_id(request: Request) -> str:
    key_id = str(request.path_params["key_id"])
    # An impossible id is answered like an unknown one and never reaches the database.
    if not _KEY.fullmatch(key_id):
        raise NotFound("no_such_key", "There is no live key with this id.")
    return key_id
