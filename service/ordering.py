"""How any order is given: one transaction with its journal row, once per Idempotency-Key.

Apart from the orders themselves, which several files tell.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import Callable, Mapping, Sequence
from typing import Any

from service.store import changes, freezes, reading, workers
from service.store.database import Database, Writing
from service.store.journal import note
from service.store.repeats import Repeat, once
from service.threads import Threads

Order = Callable[[Writing], dict[str, Any]]

IN_FORCE_S = 1.0
LOOK_S = 0.02


class Orders:
    """Gives orders to the database of one worker, and wakes that worker to obey them."""

    def __init__(self, database: Database, threads: Threads, news: asyncio.Event) -> None:
        self.database, self.threads = database, threads
        self._news = news

    async def read(self, work: Callable[[Any], Any]) -> Any:
        """Read one consistent view."""
        return await self.threads.run(self.database.read, work)

    async def give(self, order: Order, repeat: Repeat | None) -> dict[str, Any]:
        """Give an order; the first answer stands for its repeats."""

        def work(connection: Writing) -> dict[str, Any]:
            now = self.database.wall_ms()
            return once(connection, repeat, lambda: order(connection), now)

        answer = await self.threads.run(self.database.write, work)
        # This worker need not wait for its next look to obey its own order.
        self._news.set()
        return answer

    def note(
        self,
        connection: Writing,
        actor: str,
        action: str,
        line_item: str,
        reason: str,
        detail: Mapping[str, Any],
    ) -> None:
        """Add the journal row of an order."""
        note(
            connection,
            wall_ms=self.database.wall_ms(),
            actor=actor,
            action=action,
            line_item=line_item,
            reason=reason,
            detail=detail,
        )

    def stopped(
        self,
        connection: Writing,
        action: str,
        name: str,
        before: Sequence[dict[str, Any]],
        reason: str,
        actor: str,
    ) -> dict[str, Any]:
        """The common end of what stops or allows bids: journal, change number, before, after."""
        after = freezes.on(connection, sorted({name, changes.ALL}))
        left = after[changes.ALL] + (after[name] if name != changes.ALL else [])
        detail = {"before": before, "after": left}
        self.note(connection, actor, action, name, reason, detail)
        by_ms = reading.last_expiry_ms(connection, None if name == changes.ALL else name)
        number = changes.announce(connection, action, [name])
        shown = None if name == changes.ALL else name
        return {"line_item": shown, **detail, "change": number, "by_ms": by_ms}

    async def in_force(self, answer: dict[str, Any]) -> dict[str, Any]:
        """Wait a moment until every live worker has passed the change; else say by when."""
        number, by_ms = answer.pop("change"), answer.pop("by_ms")
        until = time.monotonic() + IN_FORCE_S
        while True:
            seen = await self.read(workers.bound)
            # A worker that no longer beats holds slices that end by themselves.
            if all(passed >= number for passed in seen.values()):
                return {**answer, "in_force": True, "by": None}
            if time.monotonic() > until:
                return {**answer, "in_force": False, "by_ms": by_ms}
            await asyncio.sleep(LOOK_S)


def repeat_of(actor: str, key: str | None, wish: Mapping[str, Any]) -> Repeat | None:
    """What makes two calls the same one, when the caller names a key."""
    return None if key is None else Repeat(actor, key, wish)
