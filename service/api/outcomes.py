"""The route that takes what became of bids."""

from __future__ import annotations

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import FOREIGN, note_refusal, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.outcomes import OutcomesForm, read_outcomes
from service.api.stories import stories
from service.feedback import Report

router = direct_router()


@router.post("/v1/outcomes", **described("Report up to 1,000 outcomes.", "report", OutcomesForm))
async def post_outcomes(request: Request) -> Response:
    """Answer each outcome in its place, once it is durable; a bad row spoils no other."""
    key = await require(request, "report")
    feedback = stories(request).feedback
    with feedback.admitted():
        members = await read_object(request, edge(request).batch_bytes_max)
        rows, unused = read_outcomes(members, edge(request).outcome_rows_max)
        good = [row for row in rows if isinstance(row, Report)]
        recorded = iter(await feedback.report(good, key.line_items) if good else [])
    results = [next(recorded) if isinstance(row, Report) else row for row in rows]
    for result in results:
        if result.foreign:
            note_refusal(request, key, FOREIGN)
    written: dict[str, object] = {"results": [answers.receipt(result) for result in results]}
    return answers.quick_answer(answers.with_warnings(written, unused))
