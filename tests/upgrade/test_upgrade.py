"""From the first release to this one under traffic: nothing fails, nothing is lost."""

from __future__ import annotations

import asyncio
import json
import os
import subprocess
import sys
from collections.abc import Sequence
from contextlib import AsyncExitStack, ExitStack, closing
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import text

from service.commands import caller
from service.commands.balancer import Balancer
from service.commands.drill_kill import Market, line_items
from service.commands.drill_record import OK
from service.commands.drill_traffic import Traffic
from service.commands.drill_verdict import judge
from service.commands.postgresql_process import PostgreSQLProcess
from service.commands.server_process import inherited
from service.commands.wire import Wire
from service.metrics.series import OTHER, PASSES
from service.store.audit import audit
from service.store.database import Database
from service.store.migrate import migrate, require_current
from tests.upgrade.first_release import server, unpack

pytestmark = pytest.mark.anyio
RATE = 20
ANSWER_S = 10.0
FILL_BIDS = 500
GRACE_S = 600
FULL = "full"  # Filled before the traffic begins.
CLEARING_NANOS = 500_000


@pytest.fixture(scope="module", name="old_code")
def _old_code(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return unpack(tmp_path_factory.mktemp("first-release"))


async def create_all(wire: Wire) -> None:
    """Two line items for the traffic, and one to be full of data before it begins."""
    tight, wide = line_items(200_000)
    for body in (tight, wide, {**wide, "id": FULL, "policy": {"method": "ucbid"}}):
        await caller.create(wire, {**body, "grace_s": GRACE_S})


async def fill(wire: Wire, batches: int) -> list[dict[str, Any]]:
    """Thousands of bids, most of them told; returns the answers not told yet, a hundred of each."""
    left = list[dict[str, Any]]()
    for number in range(batches):
        rows = [{"line_item": FULL}] * FILL_BIDS
        reply = await wire.post("/v1/bids/batch", {"opportunities": rows})
        answers = json.loads(reply.content, parse_float=Decimal)["answers"]
        bids = [answer for answer in answers if answer.get("bid_cpm") is not None]
        assert len(bids) > FILL_BIDS / 2, answers[:2]
        told, kept = bids[:-100], bids[-100:]
        await tell(wire, told, "recorded", first=number * FILL_BIDS)
        left += kept
    return left


async def tell(wire: Wire, bids: Sequence[dict[str, Any]], status: str, first: int = 0) -> None:
    """Report a win with its value, or a loss, for each of these bids; all get this status."""
    for start in range(0, len(bids), 200):
        outcomes = list[dict[str, object]]()
        for number, bid in enumerate(bids[start : start + 200], first + start):
            if number % 3 == 0:
                outcomes.append({"ticket": bid["ticket"], "kind": "won", "clearing_cpm": 0.5})
                value = {"kind": "value", "value": "0.004", "event_id": "v"}
                outcomes.append({"ticket": bid["ticket"], **value})
            else:
                outcomes.append({"ticket": bid["ticket"], "kind": "lost"})
        reply = await wire.post("/v1/outcomes", {"outcomes": outcomes})
        assert {row["status"] for row in json.loads(reply.content)["results"]} == {status}


def rebuilt(url: str) -> int:
    """Exit code of folding every learner from zero by the present code and comparing."""
    environment = {**inherited(), "BIDKEEL_DATABASE_URL": url, "PATH": os.environ["PATH"]}
    command = [sys.executable, "-m", "service", "rebuild"]
    return subprocess.run(command, env=environment, capture_output=True).returncode


def check(database: Database, traffic: Traffic) -> None:
    """No bid failed, nothing told is missing or twice, and all books agree to the nano."""
    history = traffic.history
    require_current(database)
    bids = {name: count for name, count in history.calls.items() if name.startswith("bid ")}
    assert set(bids) == {f"bid {OK}"}
    assert bids[f"bid {OK}"] > RATE
    assert set(history.passes) <= set(PASSES) - {OTHER}
    assert [row for row in history.sent if row.acknowledged_s is None] == []
    # What was filled in beforehand is no traffic, so to the traffic's judge it looks invented.
    slots = database.read(lambda c: c.execute(_FILLED).scalar_one())
    found = judge(history, database, GRACE_S)
    assert sum(fault.startswith("invented: ") for fault in found) == slots
    rest = [fault for fault in found if not fault.startswith(("invented: ", f"{FULL}: "))]
    assert rest == []
    wins, spent = database.read(lambda c: c.execute(_FULL).one())
    assert wins > 200
    assert spent == wins * CLEARING_NANOS
    assert database.read(audit) == []


_FILLED = text("SELECT count(*) FROM stream WHERE line_item = 'full' AND slot IS NOT NULL")
_FULL = text(
    "SELECT (SELECT count(*) FROM stream WHERE line_item = 'full' AND kind = 'won'), spent"
    " FROM balance WHERE line_item = 'full'"
)


async def is_old(wire: Wire) -> bool:
    """Whether the first release answers: it has no metrics."""
    return (await wire.get("/metrics")).status == 404


async def test_traffic_moves_from_the_first_release_to_this_one(
    old_code: Path, tmp_path: Path
) -> None:
    """An old server serves, the schema moves on under it, both serve, the new one takes over."""
    async with AsyncExitStack() as stack:
        stopping = stack.enter_context(ExitStack())
        url = stopping.enter_context(PostgreSQLProcess()).url
        old, new = server(tmp_path / "old", old_code, url), server(tmp_path / "new", None, url)
        await asyncio.to_thread(stopping.enter_context, old)
        new.key = old.key
        wires = [await stack.enter_async_context(one.wire()) for one in (old, new)]
        assert await is_old(wires[0])
        await create_all(wires[0])
        left = await fill(wires[0], 2)
        balancer = Balancer(wires)
        balancer.take_out(1)
        market, generator = np.random.default_rng(11).spawn(2)
        draw, over = Market(market).draw, asyncio.Event()
        traffic = Traffic([balancer], draw, generator, RATE, ANSWER_S)
        async with asyncio.TaskGroup() as group:
            group.create_task(traffic.play(over))
            try:
                await asyncio.sleep(1)
                await asyncio.to_thread(migrate, url)
                await asyncio.sleep(1)
                await asyncio.to_thread(stopping.enter_context, new)
                balancer.bring_in(1)
                # Both serve for a while: each release meets what the other one writes.
                await asyncio.sleep(1)
                await asyncio.to_thread(old.stop)
                balancer.take_out(0)
                await asyncio.sleep(1)
            finally:
                over.set()
        await traffic.settle()
        await traffic.tell_again(every=True)
        assert not await is_old(wires[1])
        # Bids that left the first release settle in this one, once.
        await tell(wires[1], left, "recorded")
        await tell(wires[1], left, "duplicate")
        await asyncio.to_thread(new.stop)
        with closing(Database(url)) as database:
            check(database, traffic)
        assert rebuilt(url) == 0


async def test_a_sqlite_file_of_the_first_release_is_taken_over(
    old_code: Path, tmp_path: Path
) -> None:
    """One server at a time: stopped, migrated, started; what was open settles, books agree."""
    url = f"sqlite:///{tmp_path / 'bidkeel.db'}"
    old = server(tmp_path / "old", old_code, url)
    with old:
        async with old.wire() as wire:
            assert await is_old(wire)
            await create_all(wire)
            left = await fill(wire, 1)
    migrate(url)
    new = server(tmp_path / "new", None, url)
    new.key = old.key
    with new:
        async with new.wire() as wire:
            assert not await is_old(wire)
            await tell(wire, left, "recorded")
            await fill(wire, 1)
    with closing(Database(url)) as database:
        require_current(database)
        assert database.read(audit) == []
    assert rebuilt(url) == 0
