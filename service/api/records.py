"""The routes by which people read back what was recorded, page by page or as one CSV."""

from __future__ import annotations

from collections.abc import AsyncIterator, Callable
from typing import Any

from starlette.requests import Request
from starlette.responses import Response, StreamingResponse
from starlette.types import Receive, Scope, Send

from service.api import answers, tables
from service.api.access import require
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.headers import line_item_id
from service.api.paging import Asked, asked, cursor_of, parameters, span_of
from service.api.stories import stories
from service.api.times import now_ms
from service.records import Export

router = direct_router()

PATH = "/v1/line-items/{line_item_id}"
PAGED = (
    "Newest first, {} page by page by the cursor in next; times from (included) until (not). "
    "With format=csv all of the range in one table, oldest first"
)
# What the rows of each list are called in its answer.
ROWS = {"ledger": "entries"}


class Download(StreamingResponse):
    """A CSV that ends its export whether it was read to the end or its reader went away."""

    def __init__(self, export: Export, pieces: AsyncIterator[bytes], filename: str) -> None:
        place = {"Content-Disposition": f'attachment; filename="{filename}"'}
        super().__init__(pieces, media_type="text/csv", headers=place)
        self._export = export

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Send it."""
        try:
            await super().__call__(scope, receive, send)
        finally:
            self._export.close()


def _told(name: str, what: str) -> dict[str, Any]:
    told = described(f"{what} {PAGED.format(name)}.", "read", query=parameters(name))
    either = {"application/json": {}, "text/csv": {"schema": {"type": "string"}}}
    told["responses"][200] = {"description": "A page, or a table.", "content": either}
    return told


async def _answer(request: Request, name: str, line_item: str | None) -> Response:
    wanted = asked(request, name, line_item)
    if wanted.as_csv:
        return await _table(request, wanted)
    page = await stories(request).operator.records.page(wanted.wish, wanted.before, wanted.limit)
    rows = answers.journal(page.rows) if name == "journal" else answers.plain(page.rows)
    further = cursor_of(name, page.further)
    summary = answers.plain(page.summary)
    return answers.json_answer({**summary, ROWS.get(name, name): rows, "next": further})


async def _table(request: Request, wanted: Asked) -> Response:
    wish = wanted.wish
    export = await stories(request).operator.records.export(wish)
    columns = tables.columns_of(wish.name, export.config.get("currency"))
    whose = wish.line_item or "all"
    pieces = _pieces(export, columns, lambda rows: tables.lines(columns, rows))
    return Download(export, pieces, f"{wish.name}-{whose}.csv")


async def _pieces(
    export: Export,
    columns: list[tables.Column],
    write: Callable[[list[dict[str, Any]]], bytes],
) -> AsyncIterator[bytes]:
    yield tables.header(columns)
    async for block in export.blocks(write):
        yield block


@router.get(PATH + "/stream", **_told("stream", "Read all that ever happened to a line item."))
async def get_stream(request: Request) -> Response:
    """Entries of the append-only stream."""
    await require(request, "read")
    return await _answer(request, "stream", line_item_id(request))


@router.get(PATH + "/ledger", **_told("ledger", "Read balances, days, slices and what moved."))
async def get_ledger(request: Request) -> Response:
    """What is spent, held and open, and the entries that moved it."""
    await require(request, "read")
    return await _answer(request, "ledger", line_item_id(request))


@router.get(PATH + "/lessons", **_told("lessons", "Read what the learner was taught."))
async def get_lessons(request: Request) -> Response:
    """Entries that a learner folds, and what each taught or teaches no more."""
    await require(request, "read")
    return await _answer(request, "lessons", line_item_id(request))


@router.get(
    PATH + "/decisions",
    **_told("decisions", "Read the log of bids and passes, as far as it is kept."),
)
async def get_decisions(request: Request) -> Response:
    """Bids and passes with what set them."""
    await require(request, "read")
    return await _answer(request, "decisions", line_item_id(request))


@router.get(
    PATH + "/chart",
    **described(
        "Read what happened in at most 300 steps of at least five minutes: money, outcomes, passes "
        "and quantiles of prices. The last day, or from (included) until (not), at most 62 days.",
        "read",
        query=("from", "until"),
    ),
)
async def get_chart(request: Request) -> Response:
    """Sums per step, counted as things happened."""
    await require(request, "read")
    name, (from_ms, until_ms) = line_item_id(request), span_of(request, now_ms())
    chart = await stories(request).operator.records.chart(name, from_ms, until_ms)
    return answers.json_answer(answers.plain(chart))


@router.get(PATH + "/journal", **_told("journal", "Read who did what to a line item, and why."))
async def get_journal(request: Request) -> Response:
    """Rows of the journal that name one line item."""
    await require(request, "read")
    return await _answer(request, "journal", line_item_id(request))


@router.get("/v1/journal", **_told("journal", "Read who did what anywhere, and why."))
async def get_journal_of_all(request: Request) -> Response:
    """Rows of the journal of all line items and of none."""
    await require(request, "read", of_all=True)
    return await _answer(request, "journal", None)
