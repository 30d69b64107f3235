"""bidkeel tripwires try: when each rule would have fired on a line item's recorded history."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

from service.api import answers
from service.api.forms.configs import read_candidate
from service.connecting import open_database
from service.errors import Malformed
from service.foreseeing import foreseen
from service.settings import load
from service.store.migrate import require_current
from service.tripwiring import Widths


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Which line item, under which setting, and the form of the answer."""
    parser.add_argument("line_item", help="its id")
    parser.add_argument(
        "--setting", help='JSON as in "tripwires" of a line item, or @FILE; else as it is'
    )
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(arguments: argparse.Namespace) -> int:
    """Exit code 0 when nothing would have frozen, 3 when something would; changes nothing."""
    settings = load()
    # Before the database is opened, as most mistakes are in what was typed.
    candidate = read_candidate({"tripwires": _setting(arguments.setting)})
    database = open_database(settings)
    try:
        require_current(database)
        widths, now = Widths(settings.tripwire_minute_s * 1000), database.wall_ms()
        told = database.read(lambda c: foreseen(c, arguments.line_item, candidate, widths, now))
    finally:
        database.close()
    shown = answers.plain(told)
    if arguments.json:
        sys.stdout.write(json.dumps(shown) + "\n")
    else:
        _tell(shown)
    return 3 if told["would_freeze_in_all"] else 0


def _setting(words: str | None) -> Any:
    if words is None:
        return {}
    try:
        text = Path(words[1:]).read_text("utf-8") if words.startswith("@") else words
        return json.loads(text)
    except (OSError, ValueError) as error:
        raise Malformed("bad_setting", "--setting is no JSON and no file of JSON.") from error


def _tell(shown: dict[str, Any]) -> None:
    out = sys.stdout.write
    out(f"{shown['line_item']}: {shown['looks']} moments from {shown['from_at']} on\n")
    for name, rule in shown["rules"].items():
        action, fired = rule["setup"]["action"], rule["fired"]
        out(f"  {name:17} {action:6} fired {fired} times, {rule['per_week']:g} a week\n")
        for one in rule["episodes"]:
            out(f"    {one['from_at']}  {one['saw']}\n")
    out(f"It would have frozen {shown['would_freeze_in_all']} times. Nothing was changed.\n")
