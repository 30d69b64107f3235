"""The exchange of a drill: it sells on, keeps its own books and repeats what was not answered.

Apart from the demo's exchange, which ends at the first failure; here failures are the point.
"""

from __future__ import annotations

import asyncio
import json
import time
from collections.abc import Awaitable, Callable, Sequence
from decimal import Decimal
from typing import Any

import numpy as np

from service import money
from service.commands.caller import Service
from service.commands.drill_record import (
    FAIL,
    OK,
    UNKNOWN,
    History,
    Read,
    Sent,
    how_ended,
    of_state,
)
from service.commands.exchange import Auction
from service.commands.wire import Reply

ANSWER_S_MAX = 2.0
AGAIN_S = 0.1
READ_S = 0.1
LATER_S_MAX = 2.0
SHARE_LATER = 0.3
SHARE_CUT = 0.03  # Calls that the exchange hangs up on before their answer.
SHARE_FORGOTTEN = 0.3  # Losses that it tells once and never again.
SHARE_REPEATED = 0.05

Ask = Callable[[Service], Awaitable[Reply]]


class Traffic:
    """
    Auctions against whichever worker answers.

    Args:
        wires: One per worker.
        auctions: Draws the next auction.
        rate: Bids a second.
        answer_s: How long an answer is waited for.
    """

    def __init__(
        self,
        wires: Sequence[Service],
        auctions: Callable[[], Auction],
        generator: np.random.Generator,
        rate: float,
        answer_s: float = ANSWER_S_MAX,
    ) -> None:
        self.history = History()
        self._wires, self._auctions, self._generator = wires, auctions, generator
        self._gap_s, self._answer_s = 1 / rate, answer_s
        self._tasks: set[asyncio.Task[None]] = set()

    async def play(self, over: asyncio.Event) -> None:
        """Offer auctions at the rate, whatever the answers, until it is over."""
        due = time.monotonic()
        while not over.is_set():
            self._begin(self._offer(self._auctions()))
            due += self._gap_s
            await asyncio.sleep(max(0.0, due - time.monotonic()))

    async def settle(self) -> None:
        """Wait until everything that has to be told is acknowledged."""
        while self._tasks:
            await asyncio.gather(*self._tasks)

    async def watch(self, line_items: Sequence[str], over: asyncio.Event) -> None:
        """Look at the money again and again, and hold each look against the books."""
        while not over.is_set():
            for name in line_items:
                await self.look(name)
            await asyncio.sleep(READ_S)

    async def look(self, line_item: str) -> bool:
        """One look; False when no answer came."""
        before = self.history.acknowledged[line_item]
        reply = await self._call("read", lambda w: w.get(f"/v1/line-items/{line_item}/state"))
        if reply is None:
            return False
        budget, spent, held, cost = of_state(json.loads(reply.content))
        charged = self.history.charged[line_item]
        self.history.look(Read(line_item, budget, spent, held, cost, before, charged))
        return True

    async def tell_again(self, *, every: bool = False) -> None:
        """
        Repeat, at the end, what was never acknowledged.

        Args:
            every: What was forgotten on purpose too.
        """
        sent = self.history.sent
        rows = [row for row in sent if row.acknowledged_s is None and (row.price or every)]
        for row in rows:
            await self._report([row], forget=False)

    def _begin(self, work: Any) -> None:
        task = asyncio.get_running_loop().create_task(work)
        self._tasks.add(task)
        task.add_done_callback(self._tasks.discard)

    async def _offer(self, auction: Auction) -> None:
        asked_s = time.monotonic()
        body = {"request_id": f"a-{auction.number}", "line_item": auction.line_item}
        reply = await self._call("bid", lambda wire: wire.post("/v1/bids", body))
        if reply is None:
            return
        answer = json.loads(reply.content, parse_float=Decimal)
        if answer["bid_cpm"] is None:
            self.history.passes[answer["pass"]] += 1
            return
        rows = _sold(auction, answer, asked_s)
        for row in rows:
            self.history.sell(row)
        if self._generator.random() < SHARE_LATER:
            await asyncio.sleep(self._generator.uniform(0, LATER_S_MAX))
        lost = rows[0].kind == "lost"
        await self._report(rows, forget=lost and self._generator.random() < SHARE_FORGOTTEN)

    async def _report(self, rows: list[Sent], *, forget: bool) -> None:
        """Tell it until a receipt comes; sometimes once more after, as sources do."""
        while not await self._tell(rows):
            if forget:
                return
            await asyncio.sleep(AGAIN_S)
        if self._generator.random() < SHARE_REPEATED:
            await self._tell(rows)

    async def _tell(self, rows: list[Sent]) -> bool:
        body = {"outcomes": [row.body for row in rows]}
        cut = self._generator.random() < SHARE_CUT
        wait_s = self._generator.uniform(0, 0.02) if cut else self._answer_s
        for row in rows:
            row.tries += 1
        reply = await self._call("outcome", lambda wire: wire.post("/v1/outcomes", body), wait_s)
        if reply is None:
            return False
        for row, result in zip(rows, json.loads(reply.content)["results"], strict=True):
            self.history.receive(row, result["status"], result.get("code"))
        self.history.answers_s.append(time.monotonic())
        return True

    async def _call(self, what: str, ask: Ask, wait_s: float | None = None) -> Reply | None:
        """One call to any worker; None unless it was answered well."""
        wire = self._wires[int(self._generator.integers(len(self._wires)))]
        try:
            async with asyncio.timeout(self._answer_s if wait_s is None else wait_s):
                reply = await ask(wire)
        except ConnectionRefusedError:
            self.history.ended(what, FAIL)
            return None
        except (OSError, TimeoutError):
            self.history.ended(what, UNKNOWN)
            return None
        how = how_ended(reply)
        self.history.ended(what, how)
        if how not in (OK, UNKNOWN):
            self.history.faults.append(f"{what} answered {reply.status}: {reply.content[:200]!r}")
        return reply if how == OK else None


def _sold(auction: Auction, answer: dict[str, Any], asked_s: float) -> list[Sent]:
    """The outcomes of a bid: a win costs the highest competing bid, and may bring something."""
    name, ref, ticket = auction.line_item, answer["ref"], answer["ticket"]
    if money.price(answer["bid_cpm"]) <= auction.rival:
        lost = {"ticket": ticket, "kind": "lost"}
        return [Sent(name, ref, "result", "lost", 0, lost, asked_s)]
    won = {"ticket": ticket, "kind": "won", "clearing_cpm": money.cpm_number(auction.rival)}
    rows = [Sent(name, ref, "result", "won", auction.rival, won, asked_s)]
    if auction.value is not None:
        worth = money.nanos_text(auction.value)
        value = {"ticket": ticket, "kind": "value", "value": worth, "event_id": "v"}
        rows.append(Sent(name, ref, "value:v", "value", 0, value, asked_s))
    return rows
