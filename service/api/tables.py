"""Lists as CSV: one column per fact, its unit in its name, and no cell that a spreadsheet runs."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Callable, Mapping, Sequence
from typing import Any

from service import money
from service.api import answers
from service.api.times import time_text

Cell = Callable[[Mapping[str, Any]], object]
Column = tuple[str, Cell]
# A cell that begins so is a formula to most spreadsheets; the wide forms are to some.
FORMULA = ("=", "+", "-", "@", "\uff1d", "\uff0b", "\uff0d", "\uff20")
BREAKS = ("\t", "\r", "\n")


def header(columns: Sequence[Column]) -> bytes:
    """The first line."""
    return _written([[name for name, _ in columns]])


def lines(columns: Sequence[Column], rows: Sequence[Mapping[str, Any]]) -> bytes:
    """A line for each row."""
    return _written([[cell(row) for _, cell in columns] for row in rows])


def harmless(text: str) -> str:
    """A text that a spreadsheet shows and never runs: an apostrophe goes before a formula."""
    # Blanks before it are passed over by some, and a break may begin a cell of its own.
    bare = text.lstrip(" ")
    return f"'{text}" if bare.startswith(FORMULA) or text.startswith(BREAKS) else text


def columns_of(name: str, currency: str | None) -> list[Column]:
    """The columns of a list; amounts and prices carry the currency in their name."""
    unit = (currency or "").lower()
    return {
        "stream": _stream,
        "ledger": _ledger,
        "lessons": _lessons,
        "decisions": _decisions,
        "journal": _journal,
    }[name](unit)


def _decisions(unit: str) -> list[Column]:
    return [
        ("number", _plain("number")),
        _AT,
        ("request_id", _text("request_id")),
        ("ref", _text("ref")),
        ("source", _text("source")),
        (f"floor_cpm_{unit}", _cpm("floor_cpm_nanos")),
        (f"bid_cpm_{unit}", _cpm("bid_cpm_nanos")),
        ("pass", _text("pass")),
        ("set_by", _text("set_by")),
        ("snapshot_seq", _plain("snapshot")),
        ("test", _truth("test")),
    ]


def _stream(unit: str) -> list[Column]:
    return [*_entry(unit), *_outcome(unit), ("says_json", _json("says"))]


def _ledger(unit: str) -> list[Column]:
    held = (f"held_change_{unit}", _amount("held_nanos"))
    return [*_entry(unit), held, *_outcome(unit), ("day", _inside("says", _text("day")))]


def _lessons(_unit: str) -> list[Column]:
    return [
        ("seq", _plain("seq")),
        ("kind", _text("kind")),
        _AT,
        ("ref", _text("ref")),
        ("teaches", lambda row: " ".join(row["teaches"])),
        ("cancelled", lambda row: " ".join(row["cancelled"])),
        ("rounds", _inside("taught", _plain("rounds"))),
        (f"value_{_unit}", _inside("taught", _amount("value_nanos"))),
        ("taught_json", _json("taught")),
    ]


def _journal(_unit: str) -> list[Column]:
    return [
        ("number", _plain("number")),
        _AT,
        ("actor", _text("actor")),
        ("action", _text("action")),
        ("line_item", _text("line_item")),
        ("reason", _text("reason")),
        ("detail_json", lambda row: _dumped(answers.journal([row])[0]["detail"])),
    ]


def _entry(unit: str) -> list[Column]:
    return [
        ("seq", _plain("seq")),
        ("kind", _text("kind")),
        _AT,
        ("ref", _text("ref")),
        (f"cost_{unit}", _amount("cost_nanos")),
    ]


def _outcome(unit: str) -> list[Column]:
    return [
        (f"bid_cpm_{unit}", _inside("says", _cpm("bid_cpm_nanos"))),
        (f"clearing_cpm_{unit}", _inside("says", _cpm("clearing_cpm_nanos"))),
        (f"value_{unit}", _inside("says", _amount("value_nanos"))),
        ("source", _inside("says", _text("source"))),
        ("event_id", _inside("says", _text("event_id"))),
    ]


def _plain(name: str) -> Cell:
    return lambda row: row.get(name)


def _text(name: str) -> Cell:
    return lambda row: harmless(str(row[name])) if row.get(name) is not None else None


def _amount(name: str) -> Cell:
    return lambda row: _if_whole(row.get(name), money.nanos_text)


def _cpm(name: str) -> Cell:
    # As text, since a number this small would be written with an exponent.
    return lambda row: _if_whole(row.get(name), lambda nanos: money.nanos_text(1000 * nanos))


def _truth(name: str) -> Cell:
    return lambda row: "yes" if row[name] else "no"


def _json(name: str) -> Cell:
    return lambda row: _dumped(answers.plain(row[name]))


def _inside(name: str, cell: Cell) -> Cell:
    return lambda row: cell(row[name])


def _dumped(members: object) -> str:
    return json.dumps(members, separators=(",", ":"), sort_keys=True)


def _if_whole(value: object, write: Callable[[int], str]) -> str | None:
    return write(value) if isinstance(value, int) else None


_AT: Column = ("at_utc", lambda row: time_text(row["at_ms"]))


def _written(rows: list[list[object]]) -> bytes:
    out = io.StringIO()
    csv.writer(out).writerows(rows)
    return out.getvalue().encode()
