"""Who may come in: keys as people order them, their last use, and everybody who was refused.

Apart from the other orders: what is counted here is written in the background, so that no
price ever waits for it, and a key's text is handed out once and kept nowhere.
"""

from __future__ import annotations

import logging
import secrets
from dataclasses import asdict
from typing import Any

from service.catalog import Catalog
from service.errors import StoreAway
from service.ordering import Orders, repeat_of
from service.store import keys, refusals
from service.store.database import Writing
from service.store.keys import SCOPES, Wish
from service.store.refusals import Place

__all__ = ["SCOPES", "Admitting", "Wish"]

logger = logging.getLogger(__name__)

FLUSH_S = 5.0
MINUTE_MS = 60_000
# Known keys, routes and codes are few; what comes beyond that is one place for all.
PLACES_MAX = 1000
NEWEST = 2**62


class Admitting:
    """Keys and refusals, for one worker."""

    def __init__(self, orders: Orders, catalog: Catalog) -> None:
        self._orders, self._catalog = orders, catalog
        self._refused: dict[Place, int] = {}
        self._used_minute: dict[str, int] = {}

    def refused(self, key_id: str, route: str, code: str) -> None:
        """Count one refusal; nothing of the call but its route is kept."""
        now_ms = self._orders.database.wall_ms()
        place = (now_ms - now_ms % MINUTE_MS, key_id, route, code)
        if place not in self._refused and len(self._refused) >= PLACES_MAX:
            place = (place[0], "", "", "further")
        self._refused[place] = self._refused.get(place, 0) + 1

    async def flush(self) -> None:
        """Write what was counted, and which keys were used, at most once a minute for each."""
        # Taken at once: whoever is refused while we write belongs to the next flush.
        counted, self._refused = self._refused, {}
        now_ms = self._orders.database.wall_ms()
        minute = now_ms // MINUTE_MS
        fresh = [k for k in self._catalog.keys_used() if self._used_minute.get(k) != minute]
        if not counted and not fresh:
            return

        def work(connection: Writing) -> None:
            refusals.count(connection, counted)
            keys.used(connection, fresh, now_ms)

        try:
            await self._orders.threads.run(self._orders.database.write, work)
        except StoreAway:
            # Perhaps written, perhaps not: a refusal counted twice harms less than one unseen.
            for place, count in counted.items():
                self._refused[place] = self._refused.get(place, 0) + count
            raise
        self._used_minute = {k: m for k, m in self._used_minute.items() if m == minute}
        self._used_minute.update(dict.fromkeys(fresh, minute))

    async def stop(self) -> None:
        """Write what is left."""
        try:
            await self.flush()
        except StoreAway:
            logger.warning("the database is away; the last refusals are not counted")

    async def refusals(self, before: int | None, limit: int) -> list[dict[str, Any]]:
        """Who was refused, newest first; what this worker has just counted is among it."""
        await self.flush()
        found = await self._orders.read(lambda c: refusals.page(c, before or NEWEST, limit))
        return list(found)

    async def keys(self) -> list[dict[str, Any]]:
        """Every key ever made, without its text, and whether it still works."""
        rows: list[dict[str, Any]] = await self._orders.read(keys.listed)
        return [shown(row, self._orders.database.wall_ms()) for row in rows]

    async def add(
        self, wish: Wish, reason: str, actor: str, idempotency: str | None = None
    ) -> dict[str, Any]:
        """
        Make a key; its text is in this answer, and null in that to a repeat.

        Raises:
            Malformed: The wish is for no key.
        """
        key_id, bearer = secrets.token_hex(6), keys.new_text()

        def order(connection: Writing) -> dict[str, Any]:
            now_ms = self._orders.database.wall_ms()
            keys.make(connection, key_id, wish, bearer, now_ms, by=(actor, reason))
            return {"id": key_id, "created_ms": now_ms, **asdict(wish)}

        call = {"call": "key_add", "reason": reason, **asdict(wish)}
        answer = await self._orders.give(order, repeat_of(actor, idempotency, call))
        return {**answer, "key": bearer if answer["id"] == key_id else None}

    async def end(
        self, key_id: str, reason: str, actor: str, idempotency: str | None = None
    ) -> dict[str, Any]:
        """
        End a key.

        Raises:
            NotFound: No live key of this id.
        """

        def order(connection: Writing) -> dict[str, Any]:
            now_ms = self._orders.database.wall_ms()
            keys.finish(connection, key_id, now_ms, by=(actor, reason))
            return {"id": key_id, "ended_ms": now_ms}

        call = {"call": "key_end", "id": key_id, "reason": reason}
        return await self._orders.give(order, repeat_of(actor, idempotency, call))

    async def rotate(
        self,
        key_id: str,
        overlap_ms: int,
        reason: str,
        actor: str,
        idempotency: str | None = None,
    ) -> dict[str, Any]:
        """
        Give a key a new text; the old one works for so much longer.

        Raises:
            NotFound: No live key of this id.
        """
        bearer, turn = keys.new_text(), secrets.token_hex(8)

        def order(connection: Writing) -> dict[str, Any]:
            now_ms, by = self._orders.database.wall_ms(), (actor, reason)
            until_ms = keys.renew(connection, key_id, bearer, now_ms, overlap_ms=overlap_ms, by=by)
            return {"id": key_id, "turn": turn, "old_text_until_ms": until_ms}

        call = {"call": "key_rotate", "id": key_id, "overlap_ms": overlap_ms, "reason": reason}
        answer = await self._orders.give(order, repeat_of(actor, idempotency, call))
        # Only who began this very turn has its text; a repeat finds that of the first kept nowhere.
        return {**answer, "key": bearer if answer.pop("turn") == turn else None}


def shown(row: dict[str, Any], now_ms: int) -> dict[str, Any]:
    """A key as people see it."""
    expired = row["expires_ms"] is not None and row["expires_ms"] <= now_ms
    state = "ended" if row["ended_ms"] is not None else "expired" if expired else "live"
    return {**row, "state": state, "scopes": row["scopes"].split()}
