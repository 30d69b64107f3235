"""The routes of rehearsals: ask for one, list them, read one with its result, cancel one."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import FOREIGN, actor, note_refusal, reach, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.orders import OrderForm
from service.api.forms.reading import read
from service.api.forms.rehearsals import RehearsalForm, read_rehearsal
from service.api.headers import idempotency, numbered_page
from service.api.stories import Caller, stories
from service.api.times import start_of_today_ms
from service.errors import Forbidden, NotFound

router = direct_router()

PATH = "/v1/rehearsals"
_NUMBER = re.compile(r"[0-9]{1,15}")


def _id(request: Request) -> int:
    # An impossible id is answered like an unknown one and never reaches the database.
    name = str(request.path_params["rehearsal_id"])
    if not _NUMBER.fullmatch(name):
        raise _unknown()
    return int(name)


def _unknown() -> NotFound:
    return NotFound("no_such_rehearsal", "There is no rehearsal with this id.")


async def _own(request: Request, caller: Caller) -> dict[str, Any]:
    """One rehearsal; to a limited key, one of another line item or of none is as good as none."""
    shown = await stories(request).rehearsals.one(_id(request))
    if caller.line_items is not None and shown["line_item"] not in caller.line_items:
        note_refusal(request, caller, FOREIGN)
        raise _unknown()
    return shown


def _reach(request: Request, caller: Caller, wish: Mapping[str, Any]) -> None:
    if wish["line_item"] is not None:
        reach(request, wish["line_item"])
    elif caller.line_items is not None:
        note_refusal(request, caller, "key_is_limited")
        detail = "The key is limited to some line items: name one of them."
        raise Forbidden("key_is_limited", detail)


@router.post(
    PATH,
    status_code=202,
    **described(
        "Set policies against a market, without money, in the background.",
        "operate",
        RehearsalForm,
        headers=("Idempotency-Key",),
    ),
)
async def post_rehearsal(request: Request) -> Response:
    """Put a rehearsal in the queue; its place says where to read how it goes."""
    key, once = await require(request, "operate"), idempotency(request)
    members = await read_object(request, edge(request).body_bytes_max)
    wish = read_rehearsal(members, start_of_today_ms())
    _reach(request, key, wish)
    shown = await stories(request).rehearsals.ask(wish, actor(key), **once)
    headers = {"Location": f"{PATH}/{shown['id']}"}
    return answers.json_answer(answers.plain(shown), 202, headers)


@router.get(PATH, **described("List rehearsals, newest first.", "read", query=("before", "limit")))
async def get_rehearsals(request: Request) -> Response:
    """A page of rehearsals without their results, and where the next page goes on."""
    caller = await require(request, "read")
    before, limit = numbered_page(request)
    rows = await stories(request).rehearsals.page(before, limit, caller.line_items)
    further = int(rows[-1]["id"]) if len(rows) == limit else None
    return answers.json_answer({"rehearsals": answers.plain(rows), "next": further})


@router.get(
    PATH + "/{rehearsal_id}",
    **described("Read a rehearsal, its progress and what it came to.", "read"),
)
async def get_rehearsal(request: Request) -> Response:
    """One rehearsal; `result` is null until it is done."""
    caller = await require(request, "read")
    return answers.json_answer(answers.plain(await _own(request, caller)))


@router.post(
    PATH + "/{rehearsal_id}/cancel", **described("Stop a rehearsal.", "operate", OrderForm)
)
async def post_cancel(request: Request) -> Response:
    """Stop one that waits or plays; one that has ended stays as it is."""
    key = await require(request, "operate")
    form = read(OrderForm, await read_object(request, edge(request).body_bytes_max))
    number = int((await _own(request, key))["id"])
    shown = await stories(request).rehearsals.cancel(number, form.reason, actor(key))
    return answers.json_answer(answers.plain(shown))
