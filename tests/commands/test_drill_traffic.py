"""The exchange of the drills repeats what was not answered and keeps books of what was."""

from __future__ import annotations

import asyncio
import json
from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest

from service import money
from service.commands import drill_traffic
from service.commands.drill_traffic import Traffic
from service.commands.exchange import Auction
from service.commands.wire import Reply

RIVAL = money.price(1)
BID_CPM = 2.0


class Flaky:
    """Prices everything at 2 CPM; every other report breaks, half of them after it was booked."""

    def __init__(self, status: int = 200, *, breaks: bool = True) -> None:
        self.status, self.breaks = status, breaks
        self.booked: dict[tuple[str, str], int] = {}
        self.calls = 0

    async def get(self, path: str) -> Reply:
        """The money of the line item, as booked."""
        spent = money.nanos_text(sum(self.booked.values()))
        books = {"budget": "1", "spent": spent, "held": "0", "unfunded": "0", "disputed": "0"}
        return Reply(self.status, json.dumps({"money": books}).encode())

    async def post(self, path: str, body: Mapping[str, Any]) -> Reply:
        """A bid, or receipts for outcomes."""
        if path == "/v1/bids":
            name = body["request_id"]
            answer = {"bid_cpm": BID_CPM, "pass": None, "ticket": name, "ref": name}
            return Reply(self.status, json.dumps(answer).encode())
        self.calls += 1
        if self.breaks and self.calls % 4 == 1:
            raise ConnectionRefusedError
        results = [self._book(row) for row in body["outcomes"]]
        if self.breaks and self.calls % 4 == 3:
            raise ConnectionResetError
        return Reply(self.status, json.dumps({"results": results}).encode())

    def _book(self, row: Mapping[str, Any]) -> dict[str, str]:
        slot = (row["ticket"], "value" if row["kind"] == "value" else "result")
        seen = slot in self.booked
        price = money.price(str(row["clearing_cpm"])) if row["kind"] == "won" else 0
        self.booked.setdefault(slot, price)
        return {"status": "duplicate" if seen else "recorded"}


def market(rival: int = RIVAL) -> Any:
    """Auctions at one price."""
    numbers = iter(range(10_000))
    return lambda: Auction("garden", next(numbers), rival, 5)


async def played(service: Flaky, rival: int = RIVAL) -> Traffic:
    """A few dozen auctions, all told."""
    traffic = Traffic([service], market(rival), np.random.default_rng(3), rate=500)
    over = asyncio.Event()
    playing = asyncio.create_task(traffic.play(over))
    await asyncio.sleep(0.2)
    over.set()
    await playing
    await traffic.settle()
    return traffic


@pytest.fixture
def impatient(monkeypatch: pytest.MonkeyPatch) -> None:
    """Nobody waits long here."""
    monkeypatch.setattr(drill_traffic, "AGAIN_S", 0.001)
    monkeypatch.setattr(drill_traffic, "LATER_S_MAX", 0.01)


@pytest.mark.anyio
@pytest.mark.usefixtures("impatient")
async def test_every_win_is_told_until_it_is_acknowledged() -> None:
    """Whatever breaks on the way, both books end with the same money, once."""
    service = Flaky()
    history = (await played(service)).history
    assert len(history.sent) > 20
    assert all(row.acknowledged_s for row in history.sent)
    assert sum(service.booked.values()) == history.charged["garden"]
    assert history.acknowledged == history.charged
    assert history.calls["outcome fail"] > 0
    assert history.calls["outcome unknown"] > 0
    assert history.calls["receipt duplicate"] > 0
    assert history.faults == []


@pytest.mark.anyio
@pytest.mark.usefixtures("impatient")
async def test_some_losses_are_never_told_again() -> None:
    """They cost nothing, and what is unknown of them stays unknown."""
    history = (await played(Flaky(), rival=money.price(3))).history
    kinds = {row.kind for row in history.sent}
    assert kinds == {"lost"}
    assert [row for row in history.sent if row.acknowledged_s is None] != []
    assert history.charged["garden"] == 0


@pytest.mark.anyio
@pytest.mark.usefixtures("impatient")
async def test_an_error_of_the_service_is_a_fault() -> None:
    """500 is no way to answer; 503 is one, and says that it may have happened."""
    broken = await played(Flaky(500, breaks=False))
    assert broken.history.faults != []
    away = await played(Flaky(503, breaks=False))
    assert away.history.faults == []
    assert away.history.calls["bid unknown"] > 0


@pytest.mark.anyio
@pytest.mark.usefixtures("impatient")
async def test_a_look_is_held_against_both_books() -> None:
    """What is booked but never charged shows in the next look."""
    service = Flaky(breaks=False)
    traffic = await played(service)
    assert await traffic.look("garden")
    assert traffic.history.faults == []
    service.booked["nobody", "result"] = 10**6
    assert await traffic.look("garden")
    assert "invented" in traffic.history.faults[0]
