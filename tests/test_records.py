"""Exports over a real database: all that was there, few at once, and an end whoever leaves."""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator
from typing import Any

import pytest
from starlette.types import Message

from service.api.records import Download, _pieces
from service.errors import NotFound, Overloaded
from service.records import EXPORTS_MAX, Export, Wish
from service.store import decisions
from tests.builders import NAME, Worker, append, won, working
from tests.store.test_charting import told

pytestmark = [
    pytest.mark.anyio,
    # What differs between the databases is in the store, whose tests run on both.
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]

ROWS = 4500  # More than two blocks.


@pytest.fixture(name="worker")
async def _worker(migrated_url: str) -> AsyncIterator[Worker]:
    async with working(migrated_url) as worker:
        await worker.create()
        decisions.log(worker.database, [told(1000 + n, n) for n in range(ROWS)])
        yield worker


def written(rows: list[dict[str, Any]]) -> bytes:
    """Rows by their numbers."""
    return json.dumps([row.get("number", row.get("seq")) for row in rows]).encode()


async def numbers(export: Export) -> list[list[int]]:
    """The numbers of an export, block by block."""
    return [json.loads(block) async for block in export.blocks(written)]


async def test_an_export_is_read_block_by_block(worker: Worker) -> None:
    """Oldest first, none twice, none left out, however many blocks it takes."""
    blocks = await numbers(await worker.operator.records.export(Wish("decisions", NAME)))
    assert [len(block) for block in blocks] == [2000, 2000, 500]
    assert [n for block in blocks for n in block] == list(range(1, ROWS + 1))


async def test_an_export_ends_where_it_began(worker: Worker) -> None:
    """What is added while it runs is for the next one, or it might never end."""
    export = await worker.operator.records.export(Wish("decisions", NAME))
    blocks = export.blocks(written)
    await anext(blocks)
    decisions.log(worker.database, [told(5, 10**9)])
    rest = [json.loads(block) async for block in blocks]
    assert rest[-1][-1] == ROWS


async def test_kinds_of_the_stream_are_read_in_runs(worker: Worker) -> None:
    """Also where whole runs of seqs hold none of them."""
    append(worker.database, *[won(n) for n in range(2500)])
    await worker.operator.reset(NAME, "a try", "tester")
    append(worker.database, *[won(n) for n in range(2500, 5000)])
    wish = Wish("lessons", NAME, kinds=("reset", "tick"))
    blocks = await numbers(await worker.operator.records.export(wish))
    assert [n for block in blocks for n in block] == [2502]
    [single] = await numbers(
        await worker.operator.records.export(Wish("stream", NAME, kinds=("reset",)))
    )
    assert single == [2502]


async def test_few_exports_run_at_once(worker: Worker) -> None:
    """One more is told to come again; closed twice one makes room once."""
    records, wish = worker.operator.records, Wish("stream", NAME)
    running = [await records.export(wish) for _ in range(EXPORTS_MAX)]
    with pytest.raises(Overloaded):
        await records.export(wish)
    running[0].close()
    running[0].close()
    await records.export(wish)
    with pytest.raises(Overloaded):
        await records.export(wish)


async def test_an_export_that_cannot_begin_takes_no_place(worker: Worker) -> None:
    """A line item that is not there is refused as often as one asks."""
    for _ in range(EXPORTS_MAX + 1):
        with pytest.raises(NotFound):
            await worker.operator.records.export(Wish("stream", "meadow"))


async def test_a_reader_who_leaves_ends_the_reading(worker: Worker) -> None:
    """No further block is read, and the place is free at once."""
    records = worker.operator.records
    sent, gone = list[Message](), asyncio.Event()

    async def receive() -> Message:
        await gone.wait()
        return {"type": "http.disconnect"}

    async def send(message: Message) -> None:
        sent.append(message)
        if len(sent) > 2:  # The header and one block.
            gone.set()
            await asyncio.sleep(1)

    export = await records.export(Wish("decisions", NAME))
    pieces = _pieces(export, [("number", lambda row: row["number"])], written)
    scope = {"type": "http", "asgi": {"spec_version": "2.3"}}
    await asyncio.wait_for(Download(export, pieces, "x.csv")(scope, receive, send), 5)
    assert [message.get("more_body") for message in sent] == [None, True, True]
    for _ in range(EXPORTS_MAX):
        await records.export(Wish("decisions", NAME))


async def test_bids_leave_while_an_export_is_read(worker: Worker) -> None:
    """Blocks are read and written in threads: the loop answers between any two of them."""
    export = await worker.operator.records.export(Wish("decisions", NAME))
    turns = 0

    async def turn() -> None:
        nonlocal turns
        while True:
            turns += 1
            await asyncio.sleep(0)

    task = asyncio.create_task(turn())
    blocks = await numbers(export)
    task.cancel()
    assert turns > 3 * len(blocks)
