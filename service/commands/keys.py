"""bidkeel keys: add, list, rotate and end access keys."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Any

from service.admitting import shown
from service.connecting import open_database
from service.errors import Malformed
from service.settings import load
from service.store import keys
from service.store.database import Database
from service.store.migrate import require_current

ACTOR = "command line"
REASONS = {"add": "made", "end": "ended", "rotate": "renewed"}
REASON_MAX = 500


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Four commands below `keys`."""
    parts = parser.add_subparsers(dest="keys_command", required=True)
    add = parts.add_parser("add", help="make a key; its text is shown this once")
    add.add_argument("--name", required=True, help="what the key is for, up to 100 characters")
    add.add_argument("--scopes", required=True, help=f"comma list of {', '.join(keys.SCOPES)}")
    add.add_argument("--line-items", help="comma list of the only line items it reaches")
    add.add_argument("--expires", help="when it ends, such as 2027-01-31T00:00:00Z")
    listed = parts.add_parser("list", help="every key, without its text")
    end = parts.add_parser("end", help="end a key, in force within a second")
    rotate = parts.add_parser("rotate", help="give a key a new text, shown this once")
    rotate.add_argument(
        "--overlap", type=int, default=86_400, metavar="SECONDS",
        help="for how long the old text still works (default: a day)",
    )  # fmt: skip
    for part in (end, rotate):
        part.add_argument("id", help="the id that list shows")
    for part in (add, end, rotate):
        part.add_argument("--reason", help="why, for the journal")
    for part in (add, listed, end, rotate):
        part.add_argument("--json", action="store_true", help="one JSON object")


def run(arguments: argparse.Namespace) -> int:
    """Do it and say so."""
    database = open_database(load())
    try:
        require_current(database)
        return _COMMANDS[arguments.keys_command](arguments, database)
    finally:
        database.close()


def _add(arguments: argparse.Namespace, database: Database) -> int:
    named = None if arguments.line_items is None else _list(arguments.line_items)
    expires_ms = None if arguments.expires is None else _moment(arguments.expires)
    key, bearer = keys.add(
        database, arguments.name, _list(arguments.scopes),
        line_items=named, expires_ms=expires_ms, by=_by(arguments),
    )  # fmt: skip
    told = {
        "id": key.id,
        "name": key.name,
        "scopes": sorted(key.scopes),
        "line_items": named,
        "expires_ms": expires_ms,
        "key": bearer,
    }
    return _say(arguments, told, f"Key {key.id}, shown this once:\n\n  {bearer}\n")


def _listed(arguments: argparse.Namespace, database: Database) -> int:
    rows = [shown(row, database.wall_ms()) for row in database.read(keys.listed)]
    return _say(arguments, {"keys": rows}, "\n".join(map(_line, rows)) or "No keys yet.")


def _end(arguments: argparse.Namespace, database: Database) -> int:
    keys.end(database, arguments.id, by=_by(arguments))
    return _say(arguments, {"ended": arguments.id}, f"Ended key {arguments.id}.")


def _rotate(arguments: argparse.Namespace, database: Database) -> int:
    bearer, overlap_ms = keys.new_text(), arguments.overlap * 1000
    until_ms = database.write(
        lambda c: keys.renew(
            c, arguments.id, bearer, database.wall_ms(), overlap_ms=overlap_ms, by=_by(arguments)
        )
    )
    told = {"id": arguments.id, "key": bearer, "old_text_until_ms": until_ms}
    text = f"Key {arguments.id} has a new text, shown this once:\n\n  {bearer}\n\n"
    return _say(arguments, told, f"{text}The old text works until {_time(until_ms)}.")


def _by(arguments: argparse.Namespace) -> tuple[str, str]:
    reason = arguments.reason or f"{REASONS[arguments.keys_command]} on the command line"
    if len(reason) > REASON_MAX or not reason.strip() or not reason.isprintable():
        detail = f"A reason has 1 to {REASON_MAX} printable characters."
        raise Malformed("bad_reason", detail)
    return ACTOR, reason


def _list(words: str) -> list[str]:
    return sorted({word.strip() for word in words.split(",") if word.strip()})


def _moment(given: str) -> int:
    moment: datetime | None
    try:
        moment = datetime.fromisoformat(given)
    except ValueError:
        moment = None
    if moment is None or moment.tzinfo is None:
        raise Malformed("bad_time", "Write a time with its zone, such as 2027-01-31T00:00:00Z.")
    return round(moment.timestamp() * 1000)


def _time(moment_ms: int) -> str:
    return datetime.fromtimestamp(moment_ms / 1000, UTC).isoformat(timespec="seconds")


def _line(row: dict[str, Any]) -> str:
    more = "" if row["line_items"] is None else f"  only {', '.join(row['line_items'])}"
    moments = [("until", "expires_ms"), ("old text until", "old_text_until_ms")]
    for word, name in [*moments, ("last used", "used_ms")]:
        more += "" if row[name] is None else f"  {word} {_time(row[name])}"
    return f"{row['id']}  {row['state']:5}  {' '.join(row['scopes'])}  {row['name']}{more}"


def _say(arguments: argparse.Namespace, told: Mapping[str, object], text: str) -> int:
    sys.stdout.write((json.dumps(told) if arguments.json else text) + "\n")
    return 0


_COMMANDS = {"add": _add, "list": _listed, "end": _end, "rotate": _rotate}
