"""The routes on tripwires: what they have found, and what another setting would have done."""

from __future__ import annotations

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.configs import read_candidate
from service.api.forms.tripwires import CandidateForm
from service.api.headers import line_item_id
from service.api.stories import stories

router = direct_router()

PATH = "/v1/line-items/{line_item_id}/tripwires"


@router.get(PATH, **described("Read a line item's tripwires and what they have found.", "read"))
async def get_tripwires(request: Request) -> Response:
    """Every rule, the findings that are open and those that are over, each with what to do."""
    await require(request, "read")
    shown = await stories(request).operator.tripwires.shown(line_item_id(request))
    return answers.json_answer(answers.plain(shown))


@router.post(
    PATH + "/preview",
    **described("Try tripwires on the recorded history.", "read", CandidateForm),
)
async def post_preview(request: Request) -> Response:
    """When each rule would have fired under a candidate setting; changes nothing."""
    await require(request, "read")
    candidate = read_candidate(await read_object(request, edge(request).body_bytes_max))
    told = await stories(request).operator.tripwires.preview(line_item_id(request), candidate)
    return answers.json_answer(answers.plain(told))
