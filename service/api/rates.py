"""The routes by which operators say what one unit of a currency costs in another."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from starlette.requests import Request
from starlette.responses import Response

from service import money
from service.api import answers
from service.api.access import actor, require
from service.api.body import read_object
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.forms.orders import RateForm
from service.api.forms.reading import read
from service.api.headers import idempotency
from service.api.stories import stories
from service.api.times import time_text

router = direct_router()


@router.post(
    "/v1/rates",
    status_code=201,
    **described("Post a rate.", "operate", RateForm, headers=("Idempotency-Key",)),
)
async def post_rate(request: Request) -> Response:
    """Let a rate count; open bids settle by the rate they left with."""
    key, once = await require(request, "operate", of_all=True), idempotency(request)
    form = read(RateForm, await read_object(request, edge(request).body_bytes_max))
    span = (form.from_at, form.until_at)
    rating = stories(request).operator.rating
    done = await rating.post(
        form.currency, form.into, form.rate, span, form.reason, actor(key), **once
    )
    return answers.json_answer(_rate(done), 201)


@router.get("/v1/rates", **described("Read the rates that count now or later.", "read"))
async def get_rates(request: Request) -> Response:
    """Of each pair the rate that counts now and those still to come."""
    await require(request, "read")
    rows = await stories(request).operator.rating.list()
    return answers.json_answer({"rates": [_rate(row) for row in rows]})


def _rate(row: Mapping[str, Any]) -> dict[str, object]:
    until_ms = row["until_ms"]
    return {
        "number": row["number"],
        "currency": row["currency"],
        "into": row["into"],
        "rate": money.nanos_text(row["rate"]),
        "from_at": time_text(row["from_ms"]),
        "until_at": None if until_ms is None else time_text(until_ms),
        "posted_at": time_text(row["set_ms"]),
        "by": row["actor"],
        "reason": row["reason"],
    }
