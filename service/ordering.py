"""How any order is given: one transaction with its journal row, once per Idempotency-Key.

Apart from the orders themselves, which several files tell.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Mapping
from typing import Any

from service.store.database import Database, Writing
from service.store.journal import note
from service.store.repeats import Repeat, once
from service.threads import Threads

Order = Callable[[Writing], dict[str, Any]]


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


def repeat_of(actor: str, key: str | None, wish: Mapping[str, Any]) -> Repeat | None:
    """What makes two calls the same one, when the caller names a key."""
    return None if key is None else Repeat(actor, key, wish)
