"""bidkeel keys: add, list and end access keys."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Mapping

from service.connecting import open_database
from service.errors import Malformed
from service.settings import load
from service.store import keys
from service.store.migrate import require_current


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Three commands below `keys`."""
    parts = parser.add_subparsers(dest="keys_command", required=True)
    add = parts.add_parser("add", help="make a key; its text is shown this once")
    add.add_argument("--name", required=True, help="what the key is for, up to 100 characters")
    add.add_argument("--scopes", required=True, help=f"comma list of {', '.join(keys.SCOPES)}")
    listed = parts.add_parser("list", help="every key, without its text")
    end = parts.add_parser("end", help="end a key, in force within a second")
    end.add_argument("id", help="the id that list shows")
    for part in (add, listed, end):
        part.add_argument("--json", action="store_true", help="one JSON object")


def run(arguments: argparse.Namespace) -> int:
    """Do it and say so."""
    database = open_database(load())
    try:
        require_current(database)
        if arguments.keys_command == "add":
            return _add(arguments, *keys.add(database, _name(arguments.name), _scopes(arguments)))
        if arguments.keys_command == "end":
            keys.end(database, arguments.id)
            return _say(arguments, {"ended": arguments.id}, f"Ended key {arguments.id}.")
        rows = database.read(keys.listed)
        return _say(arguments, {"keys": rows}, "\n".join(map(_line, rows)) or "No keys yet.")
    finally:
        database.close()


def _name(name: str) -> str:
    # It is shown in terminals and journals, where control characters would do harm.
    if not 1 <= len(name) <= 100 or not name.isprintable():
        raise Malformed("bad_name", "A key's name has 1 to 100 printable characters.")
    return name


def _scopes(arguments: argparse.Namespace) -> list[str]:
    return sorted({scope.strip() for scope in arguments.scopes.split(",") if scope.strip()})


def _add(arguments: argparse.Namespace, key: keys.Key, bearer: str) -> int:
    told = {"id": key.id, "name": key.name, "scopes": sorted(key.scopes), "key": bearer}
    return _say(arguments, told, f"Key {key.id}, shown this once:\n\n  {bearer}\n")


def _line(row: dict[str, object]) -> str:
    state = "live" if row["ended_ms"] is None else "ended"
    return f"{row['id']}  {state:5}  {row['scopes']}  {row['name']}"


def _say(arguments: argparse.Namespace, told: Mapping[str, object], text: str) -> int:
    sys.stdout.write((json.dumps(told) if arguments.json else text) + "\n")
    return 0
