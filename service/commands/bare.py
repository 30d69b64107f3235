"""Bare endpoints with the shapes of ours and constant answers: what the frame itself costs.

    python -m service.commands.bare PORT [WORKERS]

Apart so that it shares no code with what it is compared with. Each path answers the same body in
one of three ways: by the framework's own handling of bodies, from bytes by a validated model, and
from nothing at all.
"""

from __future__ import annotations

import sys

import uvicorn
from fastapi import FastAPI, Request, Response
from pydantic import BaseModel, Field

TICKET, REF = "x" * 180, "y" * 22


class Asked(BaseModel):
    """An opportunity."""

    request_id: str
    line_item: str
    source: str = "default"
    auction: str | None = None
    floor_cpm: float = 0.0
    features: dict[str, str | float | bool] = {}
    value_hint: float | None = None
    deadline_ms: int | None = None
    test: bool = False


class Answered(BaseModel):
    """A bid."""

    request_id: str
    line_item: str
    bid_cpm: float | None = 1.234567
    pass_: str | None = Field(default=None, serialization_alias="pass")
    ticket: str | None = TICKET
    ref: str | None = REF
    method: str = "kl-ucbid"
    set_by: str = "value"
    snapshot: int = 812


class AskedMany(BaseModel):
    """A batch of opportunities."""

    opportunities: list[Asked]


class AnsweredMany(BaseModel):
    """A batch of bids."""

    answers: list[Answered]


class Outcome(BaseModel):
    """An outcome."""

    ticket: str
    kind: str
    clearing_cpm: float | None = None


class Outcomes(BaseModel):
    """A batch of outcomes."""

    outcomes: list[Outcome]


class Receipt(BaseModel):
    """What became of an outcome."""

    ref: str = REF
    status: str = "recorded"


class Receipts(BaseModel):
    """What became of a batch of outcomes."""

    results: list[Receipt]


def create() -> FastAPI:
    """The bare service."""
    app = FastAPI(openapi_url=None)

    @app.post("/v1/bids")
    async def bid(asked: Asked) -> Answered:
        return _answer(asked)

    @app.post("/v1/bids/batch")
    async def batch(asked: AskedMany) -> AnsweredMany:
        return AnsweredMany(answers=[_answer(one) for one in asked.opportunities])

    @app.post("/v1/outcomes")
    async def outcomes(told: Outcomes) -> Receipts:
        return Receipts(results=[Receipt() for _ in told.outcomes])

    @app.post("/bytes/v1/bids")
    async def from_bytes(request: Request) -> Response:
        asked = Asked.model_validate_json(await request.body())
        said = _answer(asked).model_dump_json(by_alias=True)
        return Response(said, media_type="application/json")

    return app


def _answer(asked: Asked) -> Answered:
    return Answered(request_id=asked.request_id, line_item=asked.line_item)


if __name__ == "__main__":
    uvicorn.run(
        # By name, since further processes have to find it for themselves.
        "service.commands.bare:create",
        factory=True,
        port=int(sys.argv[1]),
        workers=int(sys.argv[2]) if len(sys.argv) > 2 else 1,
        loop="uvloop",
        http="httptools",
        access_log=False,
        log_level="warning",
    )
