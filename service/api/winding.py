"""The routes that take lessons back: retract and rewind, each with a preview."""

from __future__ import annotations

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import actor, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.orders import RetractForm, RewindForm
from service.api.forms.reading import read
from service.api.headers import idempotency, line_item_id
from service.api.stories import stories
from service.winding import Retraction

router = direct_router()

PATH = "/v1/line-items/{line_item_id}"
_ONCE = ("Idempotency-Key",)


@router.post(
    PATH + "/retract",
    **described(
        "Cancel what outcomes taught, or with preview say what that would change; its digest is "
        "that of the learner after the order, if nothing comes between.",
        "operate",
        RetractForm,
        headers=_ONCE,
    ),
)
async def post_retract(request: Request) -> Response:
    """Cancel what the named outcomes taught, or say what that would change."""
    key, once = await require(request, "operate"), idempotency(request)
    body = await read_object(request, edge(request).body_bytes_max)
    form, name = read(RetractForm, body), line_item_id(request)
    wish = Retraction(
        form.part,
        # Sorted, so that a repeat which names them in another order is still the same call.
        tuple(sorted(set(form.refs))),
        tuple(sorted(set(form.event_ids))),
        form.source,
        form.from_at,
        form.until_at,
    )
    winding = stories(request).operator.winding
    done = await winding.retract(name, wish, form.reason, actor(key), preview=form.preview, **once)
    return answers.json_answer(answers.plain(done))


@router.post(
    PATH + "/rewind",
    **described(
        "Put the learner back, or with preview say what that would change.",
        "operate",
        RewindForm,
        headers=_ONCE,
    ),
)
async def post_rewind(request: Request) -> Response:
    """Put the learner back to an earlier moment, or say what that would change."""
    key, once = await require(request, "operate"), idempotency(request)
    body = await read_object(request, edge(request).body_bytes_max)
    form, name = read(RewindForm, body), line_item_id(request)
    seq, at_ms = form.to
    winding = stories(request).operator.winding
    done = await winding.rewind(
        name, seq, form.reason, actor(key), at_ms=at_ms, preview=form.preview, **once
    )
    return answers.json_answer(answers.plain(done))
