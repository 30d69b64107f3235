"""The routes of those with authority: reverse, reconcile, close, and the quarantine."""

from __future__ import annotations

import re
from typing import TypeVar

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import actor, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.orders import OrderForm, ReconcileForm, ReverseForm
from service.api.forms.reading import read
from service.api.headers import idempotency, line_item_id, numbered_page
from service.api.stories import stories
from service.errors import NotFound

router = direct_router()

PATH = "/v1/line-items/{line_item_id}"
_ONCE = ("Idempotency-Key",)
_NUMBER = re.compile(r"[0-9]{1,15}")

Form = TypeVar("Form", bound=OrderForm)


async def _order(request: Request, form: type[Form]) -> tuple[str, Form, str, dict[str, str]]:
    # The key comes before the body, so that strangers cannot make us read one.
    key, once = await require(request, "operate"), idempotency(request)
    body = await read_object(request, edge(request).body_bytes_max)
    return line_item_id(request), read(form, body), actor(key), once


@router.post(
    PATH + "/reverse", **described("Book a refund.", "operate", ReverseForm, headers=_ONCE)
)
async def post_reverse(request: Request) -> Response:
    """Lower what is spent by a refund, as an entry of its own."""
    name, form, who, once = await _order(request, ReverseForm)
    correcting = stories(request).operator.correcting
    done = await correcting.reverse(name, form.amount, form.ref, form.reason, who, **once)
    return answers.json_answer(answers.plain(done))


@router.post(
    PATH + "/reconcile",
    **described("Confirm spend after a restore.", "operate", ReconcileForm, headers=_ONCE),
)
async def post_reconcile(request: Request) -> Response:
    """Book what a restored database has forgotten, and let the line item bid."""
    name, form, who, once = await _order(request, ReconcileForm)
    correcting = stories(request).operator.correcting
    done = await correcting.reconcile(name, form.spent, form.reason, who, **once)
    return answers.json_answer(answers.plain(done))


@router.post(PATH + "/close", **described("End a line item.", "operate", OrderForm, headers=_ONCE))
async def post_close(request: Request) -> Response:
    """Lease no more money; what is open still settles."""
    name, form, who, once = await _order(request, OrderForm)
    done = await stories(request).operator.correcting.close(name, form.reason, who, **once)
    return answers.json_answer(answers.plain(done))


@router.get(
    PATH + "/quarantine",
    **described("Read what was set aside.", "read", query=("before", "limit")),
)
async def get_quarantine(request: Request) -> Response:
    """A page of what was set aside, newest first, and the number before which it goes on."""
    await require(request, "read")
    before, limit = numbered_page(request)
    quarantine = stories(request).operator.quarantine
    rows = await quarantine.list(line_item_id(request), before, limit)
    further = rows[-1]["number"] if len(rows) == limit else None
    return answers.json_answer({"quarantine": answers.plain(rows), "next": further})


@router.post(
    PATH + "/quarantine/{number}/retry", **described("Try it again.", "operate", OrderForm)
)
async def post_retry(request: Request) -> Response:
    """Book an outcome, or teach a lesson, after all."""
    name, form, who, _ = await _order(request, OrderForm)
    quarantine = stories(request).operator.quarantine
    done = await quarantine.retry(name, _number(request), form.reason, who)
    return answers.json_answer(answers.plain(done))


@router.post(PATH + "/quarantine/{number}/release", **described("Let it go.", "operate", OrderForm))
async def post_release(request: Request) -> Response:
    """Neither book nor teach it, and count it no more."""
    name, form, who, _ = await _order(request, OrderForm)
    quarantine = stories(request).operator.quarantine
    done = await quarantine.release(name, _number(request), form.reason, who)
    return answers.json_answer(answers.plain(done))


def _number(request: Request) -> int:
    number = str(request.path_params["number"])
    if not _NUMBER.fullmatch(number):
        raise NotFound("no_such_row", "The quarantine of this line item has no such row.")
    return int(number)
