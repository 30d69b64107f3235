"""What tripwires have found and not forgotten: one open row per rule and line item."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import text

from service.store.database import Reading, Writing

_COLUMNS = (
    "number, rule, action, saw, numbers, since_ms, raised_ms, seen_ms, froze_ms, thawed_ms,"
    " cleared_ms"
)


@dataclass(frozen=True, slots=True)
class Kept:
    """
    One finding as kept; moments on the wall clock.

    Args:
        froze_ms: When it stopped bids, if it did; `thawed_ms` when somebody was seen to thaw.
        cleared_ms: None while it is open.
    """

    number: int
    rule: str
    action: str
    saw: str
    numbers: dict[str, Any]
    since_ms: int
    raised_ms: int
    seen_ms: int
    froze_ms: int | None
    thawed_ms: int | None
    cleared_ms: int | None


def still_open(connection: Reading | Writing, line_item: str) -> dict[str, Kept]:
    """The open findings of a line item by rule."""
    rows = connection.execute(_OPEN, {"id": line_item})
    return {row.rule: _kept(row) for row in rows}


def newest(connection: Reading, line_item: str, limit: int) -> list[Kept]:
    """The newest findings of a line item, open or not, newest first."""
    rows = connection.execute(_NEWEST, {"id": line_item, "limit": limit})
    return [_kept(row) for row in rows]


def put(
    connection: Writing,
    line_item: str,
    rule: str,
    *,
    action: str,
    saw: str,
    numbers: Mapping[str, Any],
    since_ms: int,
    wall_ms: int,
) -> bool:
    """Open a finding; False when the rule has one open already, whoever raised it."""
    row = {"id": line_item, "rule": rule, "action": action, "saw": saw, "since": since_ms}
    said = {"numbers": json.dumps(dict(numbers), sort_keys=True), "now": wall_ms}
    return connection.execute(_PUT, row | said).rowcount == 1


def see(
    connection: Writing, number: int, *, action: str, saw: str, numbers: Mapping[str, Any], now: int
) -> None:
    """Note that an open finding is still there, as it looks now."""
    row = {"number": number, "action": action, "saw": saw, "now": now}
    connection.execute(_SEE, row | {"numbers": json.dumps(dict(numbers), sort_keys=True)})


def froze(connection: Writing, line_item: str, rule: str, wall_ms: int) -> None:
    """Note that an open finding has stopped bids."""
    connection.execute(_FROZE, {"id": line_item, "rule": rule, "now": wall_ms})


def thawed(connection: Writing, number: int, wall_ms: int) -> None:
    """Note that somebody let bids go out in spite of an open finding."""
    connection.execute(_THAWED, {"number": number, "now": wall_ms})


def clear(connection: Writing, number: int, wall_ms: int) -> bool:
    """Close a finding; False when it is closed already."""
    return connection.execute(_CLEAR, {"number": number, "now": wall_ms}).rowcount == 1


def _kept(row: Any) -> Kept:
    return Kept(**{**row._mapping, "numbers": json.loads(row.numbers)})


_OPEN = text(
    f"SELECT {_COLUMNS} FROM tripwire_finding"  # noqa: S608
    " WHERE line_item = :id AND cleared_ms IS NULL ORDER BY number"
)
_NEWEST = text(
    f"SELECT {_COLUMNS} FROM tripwire_finding"  # noqa: S608
    " WHERE line_item = :id ORDER BY number DESC LIMIT :limit"
)
_PUT = text(
    "INSERT INTO tripwire_finding (line_item, rule, action, saw, numbers, since_ms, raised_ms,"
    " seen_ms) VALUES (:id, :rule, :action, :saw, :numbers, :since, :now, :now)"
    " ON CONFLICT DO NOTHING"
)
_SEE = text(
    "UPDATE tripwire_finding SET action = :action, saw = :saw, numbers = :numbers,"
    " seen_ms = :now WHERE number = :number AND cleared_ms IS NULL"
)
_FROZE = text(
    "UPDATE tripwire_finding SET froze_ms = :now, thawed_ms = NULL"
    " WHERE line_item = :id AND rule = :rule AND cleared_ms IS NULL"
)
_THAWED = text(
    "UPDATE tripwire_finding SET thawed_ms = :now WHERE number = :number AND thawed_ms IS NULL"
)
_CLEAR = text(
    "UPDATE tripwire_finding SET cleared_ms = :now WHERE number = :number AND cleared_ms IS NULL"
)
