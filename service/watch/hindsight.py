"""Hindsight and evidence on the page: what else might have been, and what speaks for a change."""

from __future__ import annotations

from collections.abc import Mapping

from starlette.requests import Request
from starlette.responses import Response

from service.api.forms.hindsights import HindsightForm
from service.api.forms.reading import read
from service.errors import NotFound, Refusal
from service.hindsights import Question
from service.watch.door import line_item_of, shown, stories, viewer
from service.watch.orders import sentence_of
from service.watch.pages import page

OTHERS = ("bid_cap_cpm", "flat_price_cpm")
TEXT_MAX = 40


@shown
async def get_hindsight(request: Request) -> Response:
    """The question as a form, and its answer below once a price is named; changes nothing."""
    who = await viewer(request)
    name, asked = line_item_of(request, who), request.query_params
    given = {
        field: asked.get(field, "").strip()[:TEXT_MAX]
        for field in ("other", "price", "from_at", "until_at")
    }
    looked = stories(request).operator.hindsights
    evidence, found, problem = await looked.evidence(name), None, ""
    try:
        found = await looked.look(name, question(given)) if given["price"] else None
    except NotFound:
        raise
    except Refusal as refusal:
        problem = sentence_of(refusal)
    return page(
        "hindsight.html",
        422 if problem else 200,
        **{"name": name, "given": given, "evidence": evidence, "found": found},
        **{"problem": problem, "who": who},
    )


def question(given: Mapping[str, str]) -> Question:
    """The form of the page as the API reads its own, so that both refuse the same."""
    other = given["other"] if given["other"] in OTHERS else OTHERS[0]
    span = {name: given[name] for name in ("from_at", "until_at") if given[name]}
    return read(HindsightForm, {other: given["price"], **span}).question
