"""The reads behind the watch page, for one worker: few queries, shared by all who look at once."""

from __future__ import annotations

import asyncio
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, TypeVar

from service.drawing import Chart, charts
from service.errors import no_such_line_item
from service.estimates import estimates
from service.foreseeing import told
from service.judging import Alarm, Judged, alarm, found, judge
from service.learner.profile import day_of
from service.ledger.days import local_day
from service.showing import show, show_curve
from service.store import findings, keys, reading, watching, watching_series
from service.store.database import Database, Reading
from service.store.keys import Key
from service.store.watching import Latest, Overview
from service.threads import Threads

T = TypeVar("T")
DAY_MS = 86_400_000
ROWS = 25
JOURNAL_ROWS = 12
ENTRIES = 20
FRESH_S, FRESH_S_MAX = 1.5, 10.0
# Looking at ten thousand line items is work; it may take a twentieth of the time, as a rule.
REST_SHARE = 20.0
CHARTS_FRESH_S = 5.0
Sees = Callable[[str], bool]


@dataclass(frozen=True, slots=True)
class Board:
    """One page of the front page; `limited` when the key sees only named line items."""

    alarm: Alarm
    rows: list[tuple[Judged, Latest]]
    matching: int
    page: int
    pages: int
    all_freezes: list[dict[str, Any]]
    exposed: dict[str, int]
    exposed_until_ms: int | None
    journal: list[dict[str, Any]]
    wall_ms: int


@dataclass(frozen=True, slots=True)
class Sheet:
    """
    The page of one line item: its row, its state, its journal and the tail of its stream.

    Args:
        findings: What its tripwires see now, the oldest first, each with its runbook.
    """

    judged: Judged
    latest: Latest
    state: dict[str, Any]
    all_freezes: list[dict[str, Any]]
    findings: list[dict[str, Any]]
    journal: list[dict[str, Any]]
    entries: list[dict[str, Any]]
    wall_ms: int


@dataclass(slots=True)
class _Kept:
    """What was read last and until when it is fresh."""

    until_s: float = 0.0
    judged: list[Judged] = field(default_factory=list)
    overview: Overview | None = None


class Watching:
    """Reads for people who watch; what one of them has just read is shown to the next."""

    def __init__(self, database: Database, threads: Threads) -> None:
        self._database, self._threads = database, threads
        self._versions: dict[str, int] = {}
        self._configs: dict[str, tuple[dict[str, Any], int]] = {}
        self._kept, self._turn = _Kept(), asyncio.Lock()
        self._drawn: dict[str, tuple[float, list[Chart]]] = {}

    async def key(self, key_id: str) -> Key | None:
        """The live key of this id, or None; asked with every page, so a session ends with it."""
        key = await self._read(lambda connection: keys.by_id(connection, key_id))
        # It may have come to its end without anybody ending it.
        ended = key is None or (
            key.until_ms is not None and key.until_ms <= self._database.wall_ms()
        )
        return None if ended else key

    async def board(self, sees: Sees, wanted: str, page: int, *, all_of_them: bool) -> Board:
        """
        One page of what a key may see.

        Args:
            sees: Whether the key may see a line item.
            wanted: Words to look for in ids, names and states.
            page: From 1 on; one too far is the last.
            all_of_them: Whether the key sees every line item, and so the whole journal.
        """
        overview, judged = await self._overview()
        mine = judged if all_of_them else [one for one in judged if sees(one.id)]
        matching = found(mine, wanted) if wanted else mine
        pages = max(1, -(-len(matching) // ROWS))
        page = min(max(page, 1), pages)
        rows = matching[(page - 1) * ROWS : page * ROWS]
        ids = [one.id for one in rows]
        named = None if all_of_them else [one.id for one in mine]

        def work(connection: Reading) -> tuple[dict[str, Latest], list[dict[str, Any]]]:
            latest = watching.latest(connection, ids, overview.wall_ms)
            return latest, watching.journal(connection, named, JOURNAL_ROWS)

        latest, journal = await self._read(work)
        return Board(
            alarm(mine),
            [(one, latest[one.id]) for one in rows],
            *(len(matching), page, pages, overview.all_freezes),
            *_exposed(mine),
            *(journal, overview.wall_ms),
        )

    async def sheet(self, line_item: str) -> Sheet:
        """
        Everything about one line item but its charts.

        Raises:
            NotFound: There is none.
        """

        def work(connection: Reading) -> Sheet:
            known = watching.configs(connection, [line_item])
            if line_item not in known:
                raise no_such_line_item()
            overview = watching.overview(connection, known, line_item)
            return Sheet(
                judge(overview)[0],
                watching.latest(connection, [line_item], overview.wall_ms)[line_item],
                show(reading.facts(connection, line_item)),
                overview.all_freezes,
                [told(kept) for kept in findings.still_open(connection, line_item).values()],
                watching.journal(connection, [line_item], JOURNAL_ROWS),
                watching.entries(connection, line_item, ENTRIES),
                overview.wall_ms,
            )

        return await self._read(work)

    async def charts(self, line_item: str) -> list[Chart]:
        """
        The charts of one line item, drawn at most every few seconds.

        Raises:
            NotFound: There is none.
        """
        until_s, drawn = self._drawn.get(line_item, (0.0, []))
        if time.monotonic() < until_s:
            return drawn

        def work(connection: Reading) -> list[Chart]:
            facts = reading.facts(connection, line_item)
            config = facts.row.config
            day = local_day(facts.wall_ms, config["flight"]["time_zone"])
            starts_ms, _ = day_of(facts.wall_ms, config["flight"]["time_zone"])
            from_ms = min(starts_ms, facts.wall_ms - DAY_MS)
            series = watching_series.series(connection, line_item, from_ms, facts.wall_ms, day)
            known = estimates(connection, line_item, config)
            return charts(config, series, known, show_curve(facts), facts.row.created_ms)

        drawn = await self._read(work)
        # Whoever leafs through thousands of line items must not fill the memory with charts.
        if len(self._drawn) > ROWS:
            self._drawn.clear()
        self._drawn[line_item] = (time.monotonic() + CHARTS_FRESH_S, drawn)
        return drawn

    async def _overview(self) -> tuple[Overview, list[Judged]]:
        async with self._turn:
            kept = self._kept
            if kept.overview is None or time.monotonic() >= kept.until_s:
                overview, judged, took_s = await self._read(self._judged)
                fresh_s = min(max(FRESH_S, REST_SHARE * took_s), FRESH_S_MAX)
                kept = self._kept = _Kept(time.monotonic() + fresh_s, judged, overview)
            # Set together with the rest above; the type cannot say so.
            return kept.overview or Overview(0, [], []), kept.judged

    def forget(self) -> None:
        """Read anew at the next look, as after an order."""
        self._kept = _Kept()

    def _judged(self, connection: Reading) -> tuple[Overview, list[Judged], float]:
        """
        In one view, with the seconds of work that it took.

        Configurations are parsed again only where their version has changed.
        """
        began_s = time.thread_time()
        now = watching.versions(connection)
        changed = [name for name, version in now.items() if self._versions.get(name) != version]
        if changed:
            # More names than a statement takes are read as all.
            some = None if len(changed) > 500 else changed
            self._configs = {**self._configs, **watching.configs(connection, some)}
        self._versions = now
        overview = watching.overview(connection, self._configs)
        judged = judge(overview)
        return overview, judged, time.thread_time() - began_s

    async def _read(self, work: Callable[[Reading], T]) -> T:
        return await self._threads.run(self._database.read, work)


def _exposed(judged: list[Judged]) -> tuple[dict[str, int], int | None]:
    """What open bids may still cost, by currency, and until when."""
    held: dict[str, int] = {}
    ends = []
    for one in judged:
        if one.standing.open_holds:
            currency = str(one.standing.config["currency"])
            held[currency] = held.get(currency, 0) + one.standing.open_holds
            ends.append(one.standing.holds_end_ms or 0)
    return dict(sorted(held.items())), max(ends, default=None)
