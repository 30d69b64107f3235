"""What one worker knows of line items and keys: loaded on demand, renewed by change numbers."""

from __future__ import annotations

import asyncio
import logging
import time
from dataclasses import dataclass
from typing import Any

from service.decision.price import Ready, ready
from service.decision.terms import Terms
from service.errors import no_such_line_item
from service.guard.control import Control
from service.guard.fees import Fees
from service.guard.gate import Limits
from service.guard.scale import Rate, Rates
from service.learner import arm_part
from service.learner.memory import Memory, UnreadableMemory
from service.store import changes, keys, learners, line_items, rates
from service.store.database import Database, Reading
from service.threads import Threads

logger = logging.getLogger(__name__)

MISS_S = 1.0  # How long an unknown id or key stays unknown before it is looked up again.
# Whoever guesses ids or keys must not fill the memory with what we do not have.
MISSES_MAX = 10_000
_RATE = ("number", "currency", "into", "rate", "from_ms", "until_ms")


@dataclass(frozen=True, slots=True)
class PlainRule:
    """
    The plain rule of a control share, ready to bid.

    Args:
        control: Which requests are its own, and with how much money.
        ready: What it answers.
        open: Whether it has money of the budget left, as of the snapshot.
    """

    control: Control
    ready: Ready
    open: bool


@dataclass(frozen=True, slots=True)
class Item:
    """A line item as a price needs it; `ready` is None while there is no good snapshot."""

    id: str
    version: int
    limits: Limits
    terms: Terms
    snapshot: int
    ready: Ready | None
    plain: PlainRule | None = None


class Catalog:
    """The worker's copy; every read of the hot path is a dictionary look-up."""

    def __init__(self, database: Database, threads: Threads) -> None:
        self._database = database
        self._threads = threads
        self._items: dict[str, Item] = {}
        self._keys: dict[str, keys.Key] = {}
        self._keys_used: set[str] = set()
        self._misses: dict[str, float] = {}
        self._looks: dict[str, asyncio.Future[list[Item]]] = {}
        self.rates = Rates()
        self.change_seen = 0

    def get(self, line_item: str) -> Item | None:
        """The line item if this worker knows it."""
        return self._items.get(line_item)

    async def look_up(self, line_item: str) -> Item:
        """
        Load a line item that this worker does not know yet.

        Raises:
            NotFound: There is none; the miss is remembered for a moment.
            StoreAway: The database did not answer.
        """
        if self._missed(f"item {line_item}"):
            raise no_such_line_item()
        # All who ask at once share one look, which goes on though one of them stops waiting.
        if (look := self._looks.get(line_item)) is None:
            look = self._looks[line_item] = asyncio.ensure_future(self.renew([line_item]))
            look.add_done_callback(lambda _: self._looks.pop(line_item))
        await asyncio.shield(look)
        if line_item not in self._items:
            self._miss(f"item {line_item}")
            raise no_such_line_item()
        return self._items[line_item]

    async def key_for(self, bearer: str) -> keys.Key | None:
        """The live key behind a bearer text, or None."""
        # A key that was ended is forgotten by `follow`, so this is never older than one poll.
        if bearer in self._keys:
            return self._admitted(self._keys[bearer])
        # By its hash, since what somebody guessed or mistyped is nothing to remember.
        hashed = keys.hashed(bearer)
        if self._missed(f"key {hashed}"):
            return None
        found = await self._threads.run(
            self._database.read, lambda connection: keys.by_bearer(connection, bearer)
        )
        if found is None:
            self._miss(f"key {hashed}")
            return None
        self._keys[bearer] = found
        return self._admitted(found)

    def keys_used(self) -> set[str]:
        """The ids of keys that were used since the last time somebody asked."""
        used, self._keys_used = self._keys_used, set()
        return used

    async def start(self) -> None:
        """Begin reading the changes at the newest: nothing is cached yet but the rates."""
        self.change_seen = await self._threads.run(self._database.read, changes.latest)
        # Read after the number, so that none posted in between is missed.
        await self._renew_rates()

    async def follow(self) -> tuple[list[Item], bool]:
        """Apply what changed since the last look: what was renewed, and whether any was ordered."""
        news = await self._threads.run(
            self._database.read, lambda connection: changes.since(connection, self.change_seen)
        )
        if not news:
            return [], False
        # Numbers have no gaps: one means that what lay there was forgotten while we slept.
        missed = news[0][0] != self.change_seen + 1
        if missed or any(kind == "keys" for _, kind, _ in news):
            self._keys.clear()
        # What this worker never asked for it need not load now.
        names = {name for _, kind, name in news if kind not in ("keys", rates.KIND)}
        if missed or any(kind == rates.KIND for _, kind, _ in news):
            await self._renew_rates()
        known = set(self._items)
        wanted = known if missed or changes.ALL in names else names & known
        renewed = await self.renew(sorted(wanted))
        # What was unknown a moment ago may be just what was created.
        self._misses.clear()
        # Moved on last: if the renewal failed, the next look reads the same news again.
        self.change_seen = news[-1][0]
        return renewed, any(kind != changes.SNAPSHOT for _, kind, _ in news)

    async def renew(self, names: list[str]) -> list[Item]:
        """Load these line items again, all of them in one read."""
        if not names:
            return []
        # Taken on the loop's thread, since the other one must not look into the copy.
        before = {name: self._items.get(name) for name in names}
        # Made ready in the thread too: where values are late that takes milliseconds.
        renewed = await self._threads.run(
            self._database.read,
            lambda connection: [_item(*found) for found in _load(connection, before)],
        )
        self._items.update({item.id: item for item in renewed})
        return renewed

    def _admitted(self, key: keys.Key) -> keys.Key | None:
        # Ends come by the clock and not by a change, so they are looked at with every call.
        if key.until_ms is not None and key.until_ms <= self._database.wall_ms():
            return None
        self._keys_used.add(key.id)
        return key

    async def _renew_rates(self) -> None:
        wall_ms = self._database.wall_ms()
        rows = await self._threads.run(
            self._database.read, lambda connection: rates.current(connection, wall_ms)
        )
        self.rates = Rates(Rate(**{name: row[name] for name in _RATE}) for row in rows)

    def _missed(self, what: str) -> bool:
        return time.monotonic() - self._misses.get(what, -MISS_S) < MISS_S

    def _miss(self, what: str) -> None:
        if len(self._misses) >= MISSES_MAX:
            self._misses.clear()
        self._misses[what] = time.monotonic()


def _load(
    connection: Reading, before: dict[str, Item | None]
) -> list[tuple[line_items.Row, learners.Snapshot | None, Item | None]]:
    names = list(before)
    states = learners.snapshots(connection, names)
    rows = line_items.load(connection, names)
    return [(row, states.get(name), before[name]) for name, row in rows.items()]


def _item(row: line_items.Row, snapshot: learners.Snapshot | None, before: Item | None) -> Item:
    # A change of the configuration is a new version.
    known = before is not None and before.version == row.version
    terms = before.terms if before is not None and known else Terms.from_config(row.config)
    halted = snapshot is not None and snapshot.halted
    # Unlike a damaged one, a halted state bars the last good one too: both hold what was cancelled.
    seq, made = (0, None) if halted else _ready(snapshot, terms)
    if made is None and before is not None and not halted:
        # A state that is not what was published is never used: the last good one goes on.
        seq, made = before.snapshot, before.ready
    plain = None if made is None else plain_rule(row.config, made.memory)
    return Item(row.id, row.version, limits_of(row), terms, seq, made, plain)


def _ready(snapshot: learners.Snapshot | None, terms: Terms) -> tuple[int, Ready | None]:
    if snapshot is None or not snapshot.sound:
        logger.error("the snapshot of a line item does not match its digest")
        return 0, None
    try:
        return snapshot.seq, ready(Memory.from_bytes(snapshot.state), terms)
    except UnreadableMemory:
        logger.exception("the snapshot of a line item cannot be read by this release")
        return 0, None


def plain_rule(config: dict[str, Any], memory: Memory) -> PlainRule | None:
    """The plain rule of a line item that has one; it reads nothing that was learnt."""
    control = Control.of(config.get("control"))
    if control is None:
        return None
    flat = {"method": "flat", "price": control.price}
    value = {**config["value"], "hints": False, "drift": None, "change": None}
    unbraked = {"pacing": None, "return_target": None, "allowance": None, "value": value}
    made = ready(Memory.fresh(), Terms.from_config({**config, **unbraked, "policy": flat}))
    arms = arm_part.read(memory.part(arm_part.NAME))
    spent = arms.all_of(arm_part.CONTROL, arm_part.PAID)
    return PlainRule(control, made, control.open(config["budget"], spent))


def limits_of(row: line_items.Row) -> Limits:
    """What binds every price of this line item."""
    flight: dict[str, Any] = row.config["flight"]
    fees = Fees.of(row.config.get("fees"))
    span = flight["starts_ms"], flight["ends_ms"]
    return Limits(row.config["bid_cap"], *span, bool(row.freezes), fees)
