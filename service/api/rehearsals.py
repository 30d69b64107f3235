"""The routes of rehearsals: ask for one, list them, read one with its result, cancel one."""

from __future__ import annotations

import re

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import actor, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.orders import OrderForm
from service.api.forms.reading import read
from service.api.forms.rehearsals import RehearsalForm, read_rehearsal
from service.api.headers import idempotency, numbered_page
from service.api.stories import stories
from service.api.times import start_of_today_ms
from service.errors import NotFound

router = direct_router()

PATH = "/v1/rehearsals"
_NUMBER = re.compile(r"[0-9]{1,15}")


def _id(request: Request) -> int:
    # An impossible id is answered like an unknown one and never reaches the database.
    name = str(request.path_params["rehearsal_id"])
    if not _NUMBER.fullmatch(name):
        raise NotFound("no_such_rehearsal", "There is no rehearsal with this id.")
    return int(name)


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
    key, once = await require(request, "operate", of_all=True), idempotency(request)
    members = await read_object(request, edge(request).body_bytes_max)
    wish = read_rehearsal(members, start_of_today_ms())
    shown = await stories(request).rehearsals.ask(wish, actor(key), **once)
    headers = {"Location": f"{PATH}/{shown['id']}"}
    return answers.json_answer(answers.plain(shown), 202, headers)


@router.get(PATH, **described("List rehearsals, newest first.", "read", query=("before", "limit")))
async def get_rehearsals(request: Request) -> Response:
    """A page of rehearsals without their results, and where the next page goes on."""
    await require(request, "read", of_all=True)
    before, limit = numbered_page(request)
    rows = await stories(request).rehearsals.page(before, limit)
    further = int(rows[-1]["id"]) if len(rows) == limit else None
    return answers.json_answer({"rehearsals": answers.plain(rows), "next": further})


@router.get(
    PATH + "/{rehearsal_id}",
    **described("Read a rehearsal, its progress and what it came to.", "read"),
)
async def get_rehearsal(request: Request) -> Response:
    """One rehearsal; `result` is null until it is done."""
    await require(request, "read", of_all=True)
    return answers.json_answer(answers.plain(await stories(request).rehearsals.one(_id(request))))


@router.post(
    PATH + "/{rehearsal_id}/cancel", **described("Stop a rehearsal.", "operate", OrderForm)
)
async def post_cancel(request: Request) -> Response:
    """Stop one that waits or plays; one that has ended stays as it is."""
    key = await require(request, "operate", of_all=True)
    form = read(OrderForm, await read_object(request, edge(request).body_bytes_max))
    shown = await stories(request).rehearsals.cancel(_id(request), form.reason, actor(key))
    return answers.json_answer(answers.plain(shown))
