"""The routes by which people look back: what else might have been, and what speaks for a change."""

from __future__ import annotations

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.hindsights import HindsightForm
from service.api.forms.reading import read
from service.api.headers import line_item_id
from service.api.stories import stories

router = direct_router()

PATH = "/v1/line-items/{line_item_id}"


@router.post(
    PATH + "/hindsight",
    **described(
        "Ask what another cap, flat price, floor or method would have done on the log: exact, "
        "bounded and assumed kept apart.",
        "read",
        HindsightForm,
    ),
)
async def post_hindsight(request: Request) -> Response:
    """What is certain, what is bounded, and what follows only from an assumption."""
    await require(request, "read")
    form = read(HindsightForm, await read_object(request, edge(request).body_bytes_max))
    looked = stories(request).operator.hindsights
    found = await looked.look(line_item_id(request), form.question)
    return answers.json_answer(answers.plain(found))


@router.get(
    PATH + "/evidence",
    **described(
        "Read which methods fit the line item's feedback and market, with reasons and what each "
        "may cost to learn; never applied by itself.",
        "read",
    ),
)
async def get_evidence(request: Request) -> Response:
    """Evidence before a change of method, without a score."""
    await require(request, "read")
    found = await stories(request).operator.hindsights.evidence(line_item_id(request))
    return answers.json_answer(answers.plain(found))
