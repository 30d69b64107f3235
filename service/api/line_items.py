"""The routes that create, list, read and change line items."""

from __future__ import annotations

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import actor, reach, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.changes import ChangeForm
from service.api.forms.configs import (
    check_consistent,
    defaults_taken,
    read_changes,
    read_new,
)
from service.api.forms.line_items import CreateForm
from service.api.headers import etag, idempotency, if_match, line_item_id, page
from service.api.stories import stories
from service.api.times import start_of_today_ms
from service.configuring import merged
from service.operating import View

router = direct_router()

PATH = "/v1/line-items"


@router.post(
    PATH,
    status_code=201,
    **described("Create a line item.", "operate", CreateForm, headers=("Idempotency-Key",)),
)
async def post_line_item(request: Request) -> Response:
    """Create a line item and say which defaults were taken."""
    key, once = await require(request, "operate"), idempotency(request)
    config, form = read_new(
        await read_object(request, edge(request).body_bytes_max), start_of_today_ms()
    )
    reach(request, config["id"], *(config.get("kin") or ()))
    view = await stories(request).operator.create(
        config, form.confirm, actor(key), reason=form.reason, **once
    )
    headers = {"Location": f"{PATH}/{view.id}", "ETag": etag(view.version)}
    return answers.json_answer(answers.line_item(view, defaults_taken(form)), 201, headers)


@router.get(PATH, **described("List line items by id.", "read", query=("after", "limit")))
async def get_line_items(request: Request) -> Response:
    """A page of line items, and the id after which the next page goes on."""
    key = await require(request, "read")
    after, limit = page(request)
    views = await stories(request).operator.list(after, limit, key.line_items)
    further = views[-1].id if len(views) == limit else None
    rows = [answers.line_item(view) for view in views]
    return answers.json_answer({"line_items": rows, "next": further})


@router.get(PATH + "/{line_item_id}", **described("Read a line item.", "read"))
async def get_line_item(request: Request) -> Response:
    """One line item with its ETag."""
    await require(request, "read")
    return _with_etag(await stories(request).operator.get(line_item_id(request)))


@router.patch(
    PATH + "/{line_item_id}",
    **described("Change a line item.", "operate", ChangeForm, headers=("If-Match",)),
)
async def patch_line_item(request: Request) -> Response:
    """Change the fields that came, if the version named is still the current one."""
    key, name = await require(request, "operate"), line_item_id(request)
    version, operator = if_match(request), stories(request).operator
    changes, form = read_changes(await read_object(request, edge(request).body_bytes_max))
    reach(request, *(changes.get("kin") or ()))
    # Only what is there now can be judged; if it changes before the patch, the version is stale.
    check_consistent(merged((await operator.get(name)).config, changes))
    view = await operator.patch(name, changes, version, form.confirm, form.reason, actor(key))
    return _with_etag(view)


@router.get(PATH + "/{line_item_id}/state", **described("Read a line item's state.", "read"))
async def get_state(request: Request) -> Response:
    """What the line item has learnt, bids now, has spent and holds, and why it may not bid."""
    await require(request, "read")
    state = await stories(request).operator.state(line_item_id(request))
    return answers.json_answer(answers.plain(state))


@router.get(
    PATH + "/{line_item_id}/curve",
    **described(
        "Read what is known of competing bids: per source and price the chance to win, the "
        "expected cost and the expected surplus, each with its limits; null where the data say "
        "nothing.",
        "read",
    ),
)
async def get_curve(request: Request) -> Response:
    """The curves of up to 16 sources, and of all further ones together."""
    await require(request, "read")
    curve = await stories(request).operator.curve(line_item_id(request))
    return answers.json_answer(answers.plain(curve))


def _with_etag(view: View) -> Response:
    return answers.json_answer(answers.line_item(view), 200, {"ETag": etag(view.version)})
