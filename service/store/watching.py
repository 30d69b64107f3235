"""Named reads of the watch page: a fixed number of queries, however many line items there are."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import text

from service.ledger.days import local_day
from service.store.charting import readable
from service.store.database import Reading, among
from service.store.freezes import on

HOUR_MS, DAY_MS = 3_600_000, 86_400_000
FEED_KINDS = ("won", "lost", "billed", "value")
# Bounds of what is read per line item shown, so that a page costs the same on a busy day.
ENTRIES_MAX = 2000
DECISIONS_MAX = 200
JOURNAL_ROWS = 12

Config = dict[str, Any]


@dataclass(frozen=True, slots=True)
class Standing:
    """What the overview knows of one line item; money in nanos, moments in wall clock ms."""

    id: str
    config: Config
    created_ms: int
    balance: dict[str, int]
    halted: bool
    stuck: bool
    day: dict[str, int] | None
    waiting: int = 0
    freezes: tuple[dict[str, Any], ...] = ()
    findings: tuple[str, ...] = ()
    open_holds: int = 0
    holds_end_ms: int | None = None


@dataclass(frozen=True, slots=True)
class Overview:
    """All line items at one moment, and the switch over all."""

    wall_ms: int
    standings: list[Standing]
    all_freezes: list[dict[str, Any]]


@dataclass(frozen=True, slots=True)
class Latest:
    """What one line item shown has done of late; prices in nanos per impression."""

    feed: dict[str, int] = field(default_factory=dict)
    feed_since_ms: int | None = None
    bids: int = 0
    bids_at_cap: int = 0
    set_by: str | None = None
    passes: int = 0
    top_pass: str | None = None
    price: int | None = None
    price_ms: int | None = None
    price_hour_ago: int | None = None


def versions(connection: Reading) -> dict[str, int]:
    """The version of every line item, by which a reader knows what it must read again."""
    found = connection.execute(text("SELECT id, version FROM line_item ORDER BY id"))
    return {row.id: int(row.version) for row in found}


def configs(connection: Reading, ids: Iterable[str] | None) -> dict[str, tuple[Config, int]]:
    """The configurations of these line items, or of all, each with when it was created."""
    statement = "SELECT id, config, created_ms FROM line_item"
    if ids is None:
        found = connection.execute(text(statement))
    else:
        found = connection.execute(among(f"{statement} WHERE id IN :ids"), {"ids": list(ids)})
    return {row.id: (json.loads(row.config), int(row.created_ms)) for row in found}


def overview(
    connection: Reading, known: Mapping[str, tuple[Config, int]], only: str | None = None
) -> Overview:
    """
    Every line item that is known, with its money, holds and freezes.

    Args:
        known: Configurations by id, as `configs` read them.
        only: The one line item that is wanted, instead of all.
    """
    # The moment of the last beat, not of now: service time is only known together with it.
    clock = connection.execute(text("SELECT now_ms, seen_ms FROM service_clock")).one()
    wall_ms, service_ms = int(clock.seen_ms), int(clock.now_ms)
    days = _days(connection, wall_ms, only)
    slices = _slices(connection, wall_ms - service_ms, only)
    waiting, frozen = _waiting(connection, only), _frozen(connection)
    findings = _findings(connection, only)
    # There are few zones and many line items.
    day_in = {zone: local_day(wall_ms, zone) for zone in _zones(known)}
    standings = []
    for row in _of(connection, _BALANCES, only):
        # Made since the configurations were read; the next look knows it.
        if row.line_item not in known:
            continue
        config, created_ms = known[row.line_item]
        day = day_in[config["flight"]["time_zone"]]
        standings.append(
            Standing(
                row.line_item,
                config,
                created_ms,
                dict(zip(_MONEY, row[:8], strict=True)),
                bool(row.halted),
                row.stuck_seq > 0,
                days.get((row.line_item, day)),
                waiting.get(row.line_item, 0),
                tuple(frozen.get(row.line_item, ())),
                tuple(findings.get(row.line_item, ())),
                *slices.get(row.line_item, (0, None)),
            )
        )
    return Overview(wall_ms, standings, list(frozen.get("*", ())))


def latest(connection: Reading, ids: list[str], wall_ms: int) -> dict[str, Latest]:
    """What these few line items have done of late, in five queries for all of them."""
    found: dict[str, dict[str, Any]] = {name: {} for name in ids}
    for row in connection.execute(_SPAN, {"ids": ids}):
        found[row.line_item]["feed_since_ms"] = int(row.at_ms)
    for row in connection.execute(_FEED, {"ids": ids}):
        found[row.line_item].setdefault("feed", {})[row.kind] = int(row.at_ms)
    within = {"ids": ids, "most": DECISIONS_MAX}
    outcomes: dict[str, list[Any]] = {name: [] for name in ids}
    for row in connection.execute(_DECIDED, {"ids": ids, "beyond": DECISIONS_MAX - 1}):
        outcomes[row.line_item].append(row)
    for name, rows in outcomes.items():
        found[name].update(_decided(rows))
    for row in connection.execute(_LAST_PRICE, {**within, "before": wall_ms + DAY_MS}):
        found[row.line_item].update(price=int(row.price), price_ms=int(row.at_ms))
    for row in connection.execute(_LAST_PRICE, {**within, "before": wall_ms - HOUR_MS}):
        found[row.line_item]["price_hour_ago"] = int(row.price)
    return {name: Latest(**one) for name, one in found.items()}


def journal(connection: Reading, ids: list[str] | None, limit: int) -> list[dict[str, Any]]:
    """
    The newest rows of the journal.

    Args:
        ids: Only those of these line items, and of the switch over all, which stops them too.
    """
    columns = "SELECT number, at_ms, actor, action, line_item, reason FROM journal"
    tail = " ORDER BY number DESC LIMIT :n"
    if ids is None:
        rows = connection.execute(text(columns + tail), {"n": limit})
    else:
        # Under the mark of all stands also what was done to keys, which is no line item's.
        switch = "(line_item = '*' AND action IN ('freeze', 'thaw'))"
        statement = among(f"{columns} WHERE line_item IN :ids OR {switch}{tail}")
        rows = connection.execute(statement, {"ids": ids, "n": limit})
    return [dict(row._mapping) for row in rows]


def entries(connection: Reading, line_item: str, limit: int) -> list[dict[str, Any]]:
    """The newest entries of a stream, newest first."""
    rows = connection.execute(
        text(
            "SELECT seq, kind, at_ms, cost, body FROM stream WHERE line_item = :id"
            " ORDER BY seq DESC LIMIT :n"
        ),
        {"id": line_item, "n": limit},
    )
    return [{**row._mapping, "body": readable(row.body)} for row in rows]


def _of(connection: Reading, statement: str, only: str | None, **values: Any) -> Any:
    """Run a statement for all line items, or for one: its place in the text is marked."""
    given = values if only is None else {**values, "only": only}
    for name in ("l.id", "b.line_item", "line_item"):
        wanted = "" if only is None else f" AND {name} = :only"
        statement = statement.replace(f" AND_ONLY({name})", wanted)
    return connection.execute(
        among(statement, "days") if "days" in values else text(statement), given
    )


def _zones(known: Mapping[str, tuple[Config, int]]) -> set[str]:
    return {config["flight"]["time_zone"] for config, _ in known.values()}


def _days(
    connection: Reading, wall_ms: int, only: str | None
) -> dict[tuple[str, str], dict[str, int]]:
    """The rows of the days that it may be now in some zone."""
    # From the first islands to the last it is at most three dates at once.
    around = [local_day(wall_ms + step * DAY_MS, "UTC") for step in (-1, 0, 1)]
    found = _of(connection, _DAYS, only, days=around)
    names = ("target", "spent", "held", "over_spent")
    return {(r.line_item, r.day): {name: int(getattr(r, name)) for name in names} for r in found}


def _slices(connection: Reading, apart_ms: int, only: str | None) -> dict[str, tuple[int, int]]:
    """What open bids may still cost, and until when by the wall clock."""
    return {
        row.line_item: (int(row.held), int(row.ends_ms) + apart_ms)
        for row in _of(connection, _SLICES, only)
    }


def _waiting(connection: Reading, only: str | None) -> dict[str, int]:
    return {row.line_item: int(row.n) for row in _of(connection, _WAITING, only)}


def _findings(connection: Reading, only: str | None) -> dict[str, list[str]]:
    """What tripwires see now, in their own words, the oldest first."""
    found: dict[str, list[str]] = {}
    for row in _of(connection, _FINDINGS, only):
        found.setdefault(row.line_item, []).append(f"{row.rule.replace('_', ' ')}: {row.saw}")
    return found


def _frozen(connection: Reading) -> dict[str, list[dict[str, Any]]]:
    names = connection.execute(text("SELECT DISTINCT line_item FROM freezing")).scalars().all()
    return on(connection, list(names))


def _decided(rows: list[Any]) -> dict[str, Any]:
    """Shares of the newest decisions, counted by what set the price or why there was none."""
    bids = [row for row in rows if row.reason is None]
    passes = [row for row in rows if row.reason is not None]
    at_cap = sum(int(row.n) for row in bids if row.set_by == "cap")
    return {
        "bids": sum(int(row.n) for row in bids),
        "bids_at_cap": at_cap,
        "set_by": _most(bids, "set_by"),
        "passes": sum(int(row.n) for row in passes),
        "top_pass": _most(passes, "reason"),
    }


def _most(rows: list[Any], name: str) -> str | None:
    # By name where numbers are equal, or two databases would tell different reasons.
    top = max(rows, key=lambda row: (int(row.n), str(getattr(row, name))), default=None)
    return None if top is None else str(getattr(top, name))


_MONEY = ("budget", "target", "spent", "held", "unfunded", "disputed", "seq", "at_ms")
_BALANCES = (
    "SELECT b.budget, b.target, b.spent, b.held, b.unfunded, b.disputed, b.seq, b.at_ms,"
    " b.line_item, l.halted, l.stuck_seq FROM balance b JOIN learner l ON l.line_item = b.line_item"
    " WHERE 1 = 1 AND_ONLY(b.line_item) ORDER BY b.line_item"
)
# By the key of the day for each line item: one with years of days behind it costs no more.
_DAYS = (
    "SELECT d.line_item, d.day, d.target, d.spent, d.held, d.over_spent FROM line_item l"
    " JOIN local_day d ON d.line_item = l.id AND d.day IN :days AND_ONLY(l.id)"
)
# What a slice owes may outlive its closing, until billing grace ends.
_SLICES = (
    "SELECT line_item, sum(held) AS held, max(ends_ms) AS ends_ms FROM ("
    "SELECT line_item, remaining AS held, close_ms AS ends_ms FROM slice"
    " WHERE state <> 'closed' AND remaining > 0 AND_ONLY(line_item)"
    " UNION ALL SELECT line_item, owed, billing_close_ms FROM slice WHERE owed > 0"
    " AND_ONLY(line_item)"
    ") AS holding GROUP BY line_item"
)
_WAITING = (
    "SELECT line_item, count(*) AS n FROM quarantine WHERE state = 'waiting' AND_ONLY(line_item)"
    " GROUP BY line_item"
)
_FINDINGS = (
    "SELECT line_item, rule, saw FROM tripwire_finding WHERE cleared_ms IS NULL"
    " AND_ONLY(line_item) ORDER BY raised_ms, number"
)
_NEWEST = (
    " FROM balance b JOIN stream s ON s.line_item = b.line_item"
    f" AND s.seq > b.seq - {ENTRIES_MAX} WHERE b.line_item IN :ids"
)
_SPAN = among(f"SELECT b.line_item, min(s.at_ms) AS at_ms{_NEWEST} GROUP BY b.line_item")
_KINDS = ", ".join(f"'{kind}'" for kind in FEED_KINDS)
_FEED = among(
    f"SELECT b.line_item, s.kind, max(s.at_ms) AS at_ms{_NEWEST} AND s.kind IN ({_KINDS})"
    " GROUP BY b.line_item, s.kind"
)
# By time, since that is how the log is read; a few more than the newest when moments are equal.
_DECIDED = among(
    "SELECT d.line_item, d.reason, d.set_by, count(*) AS n FROM line_item l JOIN decision d"
    " ON d.line_item = l.id AND d.at_ms >= coalesce((SELECT e.at_ms FROM decision e WHERE"
    " e.line_item = l.id ORDER BY e.at_ms DESC, e.number DESC LIMIT 1 OFFSET :beyond), 0)"
    " WHERE l.id IN :ids AND d.test = 0 GROUP BY d.line_item, d.reason, d.set_by"
)
# Among so many only: a line item that passes all day must not be read back to the morning.
_LAST_PRICE = among(
    "SELECT d.line_item, d.price, d.at_ms FROM line_item l JOIN decision d ON d.number ="
    " (SELECT e.number FROM (SELECT number, at_ms, price, test FROM decision"
    " WHERE line_item = l.id AND at_ms <= :before ORDER BY at_ms DESC, number DESC LIMIT :most) e"
    " WHERE e.price IS NOT NULL AND e.test = 0 ORDER BY e.at_ms DESC, e.number DESC LIMIT 1)"
    " WHERE l.id IN :ids"
)
