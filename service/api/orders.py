"""The routes by which people stop a line item, let it bid and begin its learner afresh."""

from __future__ import annotations

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import actor, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.orders import OrderForm, ResetForm
from service.api.forms.reading import read
from service.api.headers import idempotency, line_item_id
from service.api.stories import stories

router = direct_router()

PATH = "/v1/line-items/{line_item_id}"
_ONCE = ("Idempotency-Key",)


async def _order(request: Request, *, of_all: bool = False) -> tuple[str, str, dict[str, str]]:
    key, once = await require(request, "operate", of_all=of_all), idempotency(request)
    form = read(OrderForm, await read_object(request, edge(request).body_bytes_max))
    return form.reason, actor(key), once


@router.post(
    PATH + "/freeze", **described("Stop a line item.", "operate", OrderForm, headers=_ONCE)
)
async def post_freeze(request: Request) -> Response:
    """Stop one line item and say from when no price can leave."""
    reason, actor, once = await _order(request)
    done = await stories(request).operator.freeze(line_item_id(request), reason, actor, **once)
    return answers.json_answer(answers.plain(done))


@router.post(
    PATH + "/thaw", **described("Let a line item bid.", "operate", OrderForm, headers=_ONCE)
)
async def post_thaw(request: Request) -> Response:
    """Lift the freezes of people from one line item."""
    reason, actor, once = await _order(request)
    done = await stories(request).operator.thaw(line_item_id(request), reason, actor, **once)
    return answers.json_answer(answers.plain(done))


@router.post(
    PATH + "/reset",
    **described(
        "Begin the learner afresh, or with preview say what that would change.",
        "operate",
        ResetForm,
        headers=_ONCE,
    ),
)
async def post_reset(request: Request) -> Response:
    """Begin one line item's learner afresh; money stays as it is."""
    key, once = await require(request, "operate"), idempotency(request)
    form = read(ResetForm, await read_object(request, edge(request).body_bytes_max))
    name, operator, who = line_item_id(request), stories(request).operator, actor(key)
    if form.preview:
        done = await operator.reset(name, form.reason, who, preview=True)
    else:
        done = await operator.reset(name, form.reason, who, once.get("idempotency"))
    return answers.json_answer(answers.plain(done))


@router.post("/v1/freeze", **described("Stop everything.", "operate", OrderForm, headers=_ONCE))
async def post_freeze_all(request: Request) -> Response:
    """Throw the one switch that stops all line items."""
    reason, actor, once = await _order(request, of_all=True)
    done = await stories(request).operator.freeze(None, reason, actor, **once)
    return answers.json_answer(answers.plain(done))


@router.post(
    "/v1/thaw", **described("Lift the switch over all.", "operate", OrderForm, headers=_ONCE)
)
async def post_thaw_all(request: Request) -> Response:
    """Lift the switch over all line items; their own freezes stay."""
    reason, actor, once = await _order(request, of_all=True)
    done = await stories(request).operator.thaw(None, reason, actor, **once)
    return answers.json_answer(answers.plain(done))
