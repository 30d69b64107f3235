"""The routes that ask for a price."""

from __future__ import annotations

import time

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import out_of_reach, reach, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.bids import BatchForm, BidForm, read_batch, read_bid
from service.api.stories import stories
from service.decision.opportunity import Opportunity
from service.errors import Refusal

router = direct_router()


@router.post("/v1/bids", **described("Ask for a price for one opportunity.", "bid", BidForm))
async def post_bid(request: Request) -> Response:
    """Answer one opportunity with a bid or a pass."""
    # Taken before the key is looked up, for the caller's deadline runs meanwhile.
    arrived = time.monotonic()
    key = await require(request, "bid")
    opportunity, unused = read_bid(await read_object(request, edge(request).body_bytes_max))
    if key.line_items is not None:
        reach(request, opportunity.line_item, *opportunity.line_items)
    answer = await stories(request).bidder.bid(opportunity, arrived)
    return answers.quick_answer(answers.with_warnings(answers.bid(answer), unused))


@router.post("/v1/bids/batch", **described("Ask for up to 500 prices.", "bid", BatchForm))
async def post_batch(request: Request) -> Response:
    """Answer each opportunity in its place; a bad row is an error in its place."""
    arrived = time.monotonic()
    key = await require(request, "bid")
    members = await read_object(request, edge(request).batch_bytes_max)
    rows, unused = read_batch(members, edge(request).batch_rows_max)
    if key.line_items is not None:
        rows = [_within_reach(request, row) for row in rows]
    results = await stories(request).bidder.bid_batch(rows, arrived)
    written = [
        answers.bad_row(result) if isinstance(result, Refusal) else answers.bid(result)
        for result in results
    ]
    return answers.quick_answer(answers.with_warnings({"answers": written}, unused))


def _within_reach(request: Request, row: Opportunity | Refusal) -> Opportunity | Refusal:
    """The row, or the refusal in its place when the key is limited to other line items."""
    if isinstance(row, Refusal):
        return row
    named = (row.line_item, *row.line_items)
    found = (out_of_reach(request, name) for name in named)
    return next((refusal for refusal in found if refusal is not None), row)
