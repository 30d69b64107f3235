"""Line items: their configuration and version, apart from their money."""

from __future__ import annotations

import json
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.errors import Conflict, Stale, no_such_line_item
from service.ledger.accounts import NO_LIMIT
from service.ledger.budgets import set_budget, set_day_budget
from service.ledger.days import local_day
from service.ledger.entries import Entry
from service.store.books import Books
from service.store.database import Reading, Writing, among
from service.store.freezes import on


@dataclass(frozen=True, slots=True)
class Row:
    """A line item as stored, with every freeze on it, the switch over all included."""

    id: str
    config: dict[str, Any]
    version: int
    created_ms: int
    updated_ms: int
    freezes: list[dict[str, Any]]


def create(connection: Writing, config: Mapping[str, Any], wall_ms: int) -> None:
    """
    Insert a line item with its balance.

    Raises:
        Conflict: The id is taken.
    """
    row = {"id": config["id"], "config": json.dumps(config, sort_keys=True), "now": wall_ms}
    done = connection.execute(
        text(
            "INSERT INTO line_item (id, config, version, created_ms, updated_ms)"
            " VALUES (:id, :config, 1, :now, :now) ON CONFLICT DO NOTHING"
        ),
        row,
    )
    # Insert first and look at the count: looking first would let two callers both find nothing.
    if done.rowcount == 0:
        raise Conflict("line_item_exists", "There is a line item with this id already.")
    connection.execute(
        text(
            "INSERT INTO balance (line_item, budget, target, spent, held, unfunded, disputed,"
            " seq, at_ms) VALUES (:id, :budget, :budget, 0, 0, 0, 0, 0, :now)"
        ),
        {"id": config["id"], "budget": config["budget"], "now": wall_ms},
    )
    books = Books(connection, [config["id"]], wall_ms)
    books.post(config["id"], Entry("create", _money(config)))
    books.save()


def change(connection: Writing, config: Mapping[str, Any], version: int, wall_ms: int) -> None:
    """
    Store a new configuration under the lock of the balance, money and stream included.

    Args:
        version: The version the operator has seen.

    Raises:
        Stale: Somebody changed it meanwhile.
        Conflict: The budget would fall below what is spent.
    """
    name = config["id"]
    books = Books(connection, [name], wall_ms)
    done = connection.execute(
        text(
            "UPDATE line_item SET config = :config, version = version + 1, updated_ms = :now"
            " WHERE id = :id AND version = :version"
        ),
        {
            "config": json.dumps(config, sort_keys=True),
            "now": wall_ms,
            "id": name,
            "version": version,
        },
    )
    # The version is part of the WHERE, so that of two editors exactly one gets through.
    if done.rowcount == 0:
        raise Stale("stale_version", "This line item has changed since that version.")
    books.replace_account(set_budget(books.accounts[name], config["budget"]))
    # Other days keep the limit they were opened with; their money is spent or comes back.
    today = (name, local_day(wall_ms, config["flight"]["time_zone"]))
    books.load_days([today])
    if today in books.days:
        limit = config["daily_budget"] or NO_LIMIT
        books.replace_day(set_day_budget(books.days[today], limit))
    books.post(name, Entry("edit", {"version": version + 1, **_money(config)}))
    books.save()


def load(connection: Reading | Writing, ids: list[str]) -> dict[str, Row]:
    """These line items, as far as they exist."""
    return _rows(connection, connection.execute(_BY_ID, {"ids": ids}))


def page(
    connection: Reading, after: str | None, limit: int, only: Collection[str] | None = None
) -> list[Row]:
    """The next line items in the order of their ids; of `only` these when it is given."""
    if only is not None:
        named = load(connection, sorted(name for name in only if name > (after or "")))
        return [named[name] for name in sorted(named)][:limit]
    found = connection.execute(_AFTER, {"after": after or "", "limit": limit})
    return list(_rows(connection, found).values())


def one(connection: Reading | Writing, line_item: str) -> Row:
    """
    One line item.

    Raises:
        NotFound: There is none of this id.
    """
    found = load(connection, [line_item])
    if line_item not in found:
        raise no_such_line_item()
    return found[line_item]


def _money(config: Mapping[str, Any]) -> dict[str, Any]:
    """What of a configuration says how money may be spent, so that a fold knows it by then."""
    return {
        "budget": config["budget"],
        "daily_budget": config["daily_budget"],
        "ends_ms": config["flight"]["ends_ms"],
        "zone": config["flight"]["time_zone"],
        "pacing": config.get("pacing"),
        "guess": config["value"]["expected"]["per_impression"],
        "grace_ms": config["grace_ms"],
        "control": config.get("control"),
    }


_BY_ID = among(
    "SELECT id, config, version, created_ms, updated_ms FROM line_item WHERE id IN :ids ORDER BY id"
)
_AFTER = text(
    "SELECT id, config, version, created_ms, updated_ms FROM line_item"
    " WHERE id > :after ORDER BY id LIMIT :limit"
)


def _rows(connection: Reading | Writing, found: Any) -> dict[str, Row]:
    rows = found.all()
    freezes = on(connection, [row.id for row in rows] + ["*"])
    return {
        row.id: Row(
            row.id,
            json.loads(row.config),
            row.version,
            row.created_ms,
            row.updated_ms,
            freezes["*"] + freezes[row.id],
        )
        for row in rows
    }
