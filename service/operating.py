"""The fourth story: people give orders (create, change, freeze, thaw, reset), all journalled.

Each order is one transaction with its journal row and its change number, and it answers
with what was before and what is after. Orders that take lessons back, move money or open the
quarantine are told in files of their own, and reached through here.
"""

from __future__ import annotations

import asyncio
from collections.abc import Collection, Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

from service.admitting import Admitting
from service.catalog import Catalog
from service.configuring import (
    drawn_otherwise,
    filled,
    guessed_otherwise,
    merged,
    object_to,
    object_to_change,
    pooled,
    taught_otherwise,
)
from service.correcting import Correcting
from service.decision.learnability import defaults, learnability
from service.errors import Malformed, StoreAway
from service.foreseeing import Foreseeing
from service.hindsights import Hindsights
from service.ledger.entries import Entry
from service.ordering import Orders, repeat_of
from service.quarantining import Quarantining
from service.rating import Rating
from service.records import Records
from service.showing import show, show_curve
from service.store import changes, epochs, freezes, learners, line_items, reading
from service.store.books import Books
from service.store.database import Database, Writing
from service.store.keys import Key
from service.store.line_items import Row
from service.teaching import FRESH, lawful
from service.threads import Threads
from service.tripwiring import BUCKET_MS, Widths
from service.winding import Winding

__all__ = ["Key", "Operator", "View"]

CHECKPOINT_ENTRIES = 10_000
NEW = "a new line item"  # Why it was created, when nobody says.


@dataclass(frozen=True, slots=True)
class View:
    """A line item as people see it; money in nanos inside `config`."""

    id: str
    version: int
    config: dict[str, Any]
    created_ms: int
    updated_ms: int
    freezes: list[dict[str, Any]]
    learnability: str
    defaults: list[str]


class Operator:
    """Obeys people, for one worker."""

    def __init__(
        self,
        database: Database,
        threads: Threads,
        catalog: Catalog,
        news: asyncio.Event,
        checkpoint_entries: int = CHECKPOINT_ENTRIES,
        tripwire_minute_ms: int = BUCKET_MS,
    ) -> None:
        self._database, self._catalog = database, catalog
        orders = self._orders = Orders(database, threads, news)
        self.winding = Winding(orders, checkpoint_entries)
        self.correcting = Correcting(orders)
        self.tripwires = Foreseeing(orders, Widths(tripwire_minute_ms))
        self.quarantine = Quarantining(orders, self.winding)
        self.admitting = Admitting(orders, catalog)
        self.records = Records(database, threads)
        self.hindsights = Hindsights(orders)
        self.rating = Rating(orders)

    async def key_for(self, bearer: str) -> Key | None:
        """The live key behind a bearer text, or None."""
        return await self._catalog.key_for(bearer)

    async def create(
        self,
        config: Mapping[str, Any],
        confirm: str | None,
        actor: str,
        idempotency: str | None = None,
        reason: str | None = None,
    ) -> View:
        """
        Create a line item; it may bid as soon as this returns.

        Raises:
            Malformed: Settings that the method cannot work with.
            NeedsConfirmation: Allowed only with the word named in the refusal.
            Conflict: The id is taken, or the key was used for another call.
        """
        full, taken = filled(config)
        object_to(full, confirm)

        def order(connection: Writing) -> dict[str, Any]:
            now = self._database.wall_ms()
            line_items.create(connection, full, now)
            learners.begin(connection, full["id"], FRESH, now)
            # Bids may leave before the first lesson, and without a law they could not be weighed.
            if (law := lawful(FRESH, full)) is not None:
                epochs.keep(connection, full["id"], 0, law)
            self._orders.note(
                connection, actor, "create", full["id"], reason or NEW, {"after": full}
            )
            self._take_prior(connection, full, actor)
            changes.announce(connection, "line_item", [full["id"]])
            # A plain dict, because it is kept as JSON and is the answer to a repeat.
            return asdict(_view(line_items.one(connection, full["id"]), taken))

        wish = {"call": "create", "config": dict(config), "confirm": confirm}
        wish |= {} if reason is None else {"reason": reason}
        return View(**await self._orders.give(order, repeat_of(actor, idempotency, wish)))

    async def get(self, line_item: str) -> View:
        """
        One line item.

        Raises:
            NotFound: There is none.
        """
        row = await self._orders.read(lambda connection: line_items.one(connection, line_item))
        return _view(row, [])

    async def list(
        self, after: str | None, limit: int, only: Collection[str] | None = None
    ) -> list[View]:
        """The line items after this id, in the order of ids; of `only` these when it is given."""
        rows = await self._orders.read(lambda c: line_items.page(c, after, limit, only))
        return [_view(row, []) for row in rows]

    async def patch(
        self,
        line_item: str,
        changed: Mapping[str, Any],
        version: int,
        confirm: str | None,
        reason: str | None,
        actor: str,
    ) -> View:
        """
        Change a line item that nobody else has changed since `version`.

        Raises:
            Stale: Somebody has.
            NeedsConfirmation: It may cost a lot, and the value that confirms it did not come.
            Conflict: The budget would fall below what is spent.
        """

        def order(connection: Writing) -> dict[str, Any]:
            before = line_items.one(connection, line_item)
            after, _ = defaults(merged(before.config, changed))
            object_to_change(before.config, after, confirm, reason)
            line_items.change(connection, after, version, self._database.wall_ms())
            if taught_otherwise(before.config, after):
                learners.refold(connection, line_item, FRESH)
            if drawn_otherwise(before.config, after):
                epochs.end(connection, line_item)
            detail = {"before": before.config, "after": after}
            why = reason or f"no reason given; changed: {', '.join(sorted(changed))}"
            self._orders.note(connection, actor, "patch", line_item, why, detail)
            if guessed_otherwise(before.config, after):
                # An empty one: what kin once gave must not overrule a guess made since.
                self._post(connection, line_item, Entry("prior", {}))
            if after.get("kin") != before.config.get("kin"):
                self._take_prior(connection, after, actor)
            changes.announce(connection, "line_item", [line_item])
            return asdict(_view(line_items.one(connection, line_item), []))

        # No repeat is kept: the version it names makes a second try stale.
        return View(**await self._orders.give(order, None))

    async def state(self, line_item: str) -> dict[str, Any]:
        """
        What is known of a line item now: money, learner, price, feed, freezes.

        Raises:
            NotFound: There is none.
        """
        return show(
            await self._orders.read(lambda connection: reading.facts(connection, line_item))
        )

    async def curve(self, line_item: str) -> dict[str, Any]:
        """
        What is known of competing bids, per source and price.

        Raises:
            NotFound: There is none.
        """
        # Drawn in the thread too: where news of several kinds are mixed it takes a while.
        shown: dict[str, Any] = await self._orders.read(
            lambda connection: show_curve(reading.facts(connection, line_item))
        )
        return shown

    async def freeze(
        self, line_item: str | None, reason: str, actor: str, idempotency: str | None = None
    ) -> dict[str, Any]:
        """Stop one line item, or all; answers whether every live worker has stopped already."""

        def order(connection: Writing) -> dict[str, Any]:
            name, source, before = self._frozen(connection, line_item)
            now = self._database.wall_ms()
            # Under the lock of leases, so that no slice slips in beside the freeze.
            freezes.hold_still(connection, name)
            freezes.put(connection, name, source, wall_ms=now, actor=actor, reason=reason)
            return self._orders.stopped(connection, "freeze", name, before, reason, actor)

        wish = {"call": "freeze", "line_item": line_item, "reason": reason}
        answer = await self._orders.give(order, repeat_of(actor, idempotency, wish))
        return await self._orders.in_force(answer)

    async def thaw(
        self, line_item: str | None, reason: str, actor: str, idempotency: str | None = None
    ) -> dict[str, Any]:
        """Lift every freeze of a line item, or the switch over all (and only that)."""

        def order(connection: Writing) -> dict[str, Any]:
            name, source, before = self._frozen(connection, line_item)
            # Not what waits for its spend to be confirmed, and not what is closed for good.
            sources = [source] if line_item is None else ["person", "tripwire", "audit"]
            freezes.lift(connection, name, sources, wall_ms=self._database.wall_ms())
            return self._orders.stopped(connection, "thaw", name, before, reason, actor)

        wish = {"call": "thaw", "line_item": line_item, "reason": reason}
        return await self._orders.in_force(
            await self._orders.give(order, repeat_of(actor, idempotency, wish))
        )

    async def reset(
        self,
        line_item: str,
        reason: str,
        actor: str,
        idempotency: str | None = None,
        *,
        preview: bool = False,
    ) -> dict[str, Any]:
        """Let the learner begin afresh; money and the stream before it stay as they are."""
        return await self.winding.reset(
            line_item, reason, actor, preview=preview, idempotency=idempotency
        )

    async def health(self) -> dict[str, Any]:
        """Whether the database answers; prices leave from slices in hand either way."""
        try:
            await self._orders.read(changes.latest)
        except StoreAway:
            return {"status": "degraded", "database": "away"}
        return {"status": "ok", "database": "here"}

    def _take_prior(self, connection: Writing, config: Mapping[str, Any], actor: str) -> None:
        """Let what sibling line items have learnt enter the stream as one lesson."""
        # Kin that is named twice would count twice.
        kin = sorted(set(config.get("kin") or []))
        if not kin:
            return
        rows, states = line_items.load(connection, kin), learners.snapshots(connection, kin)
        if set(rows) != set(kin):
            raise Malformed("no_such_kin", "A line item named as kin does not exist.")
        if any(row.config["currency"] != config["currency"] for row in rows.values()):
            raise Malformed("other_currency", "Kin must share the currency of the line item.")
        states_of = [(rows[name].config, states[name].state) for name in kin]
        entry = pooled(states_of, config["value"]["ceiling"])
        if entry is None:
            return
        self._post(connection, config["id"], entry)
        detail = {"kin": kin, "after": dict(entry.body)}
        self._orders.note(connection, actor, "prior", config["id"], "what kin have learnt", detail)

    def _post(self, connection: Writing, line_item: str, entry: Entry) -> int:
        """Append one entry to a stream under its lock; returns its seq."""
        books = Books(connection, [line_item], self._database.wall_ms())
        books.post(line_item, entry)
        books.save()
        return books.accounts[line_item].seq

    def _frozen(
        self, connection: Writing, line_item: str | None
    ) -> tuple[str, str, Sequence[dict[str, Any]]]:
        if line_item is None:
            return changes.ALL, "all", freezes.on(connection, [changes.ALL])[changes.ALL]
        return line_item, "person", line_items.one(connection, line_item).freezes


def _view(row: Row, taken: list[str]) -> View:
    return View(
        row.id,
        row.version,
        row.config,
        row.created_ms,
        row.updated_ms,
        row.freezes,
        learnability(row.config),
        taken,
    )
