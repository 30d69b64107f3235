"""Auctions that a user brings as CSV, read row by row: bad rows are counted and never fatal.

Columns, by their names in the first row, in any order:

- `highest_competing_cpm` (needed): the least bid that would have won, as CPM.
- `at`: RFC 3339 with its offset; without it auctions come a second apart.
- `value`: what the impression brings if won, in currency; empty where nobody knows.
- `floor_cpm`: the least the seller took. `source`: where it was sold.
- `value_hint`: the caller's own prediction of the value, in currency.
- `feature.NAME`: a feature of the impression, as text, number, true or false.
"""

from __future__ import annotations

import csv
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from datetime import datetime
from typing import TextIO

from service import money
from service.learner import hashing
from service.learner.hashing import Feature, Hashed
from service.rehearsal.player import Auction

NEEDED = "highest_competing_cpm"
COLUMNS = ("at", NEEDED, "value", "floor_cpm", "source", "value_hint")
FEATURE = "feature."
FEATURES_MAX = 32
TEXT_MAX = 64
TOLD_MAX = 20
STEP_MS = 1000
# Fixed, so that a file is rehearsed alike on every machine and needs no database.
HASH_KEY = b"rehearsal"
EXACT = ("every outcome and cost: the least bid that wins is known of every auction read",)
ASSUMED = (
    "competing bids, floors and what came up for sale do not answer to other bids",
    "a win of unknown value counts as bringing nothing, and teaches its price only",
)


class NoAuctions(ValueError):
    """The first row does not name the column that is needed."""


@dataclass(slots=True)
class Told:
    """
    What was read and what was not.

    Args:
        rows: Data rows seen.
        bad: Rows that were left out.
        first_bad: Line number and what is wrong, of the first twenty.
        moved: Rows that name an earlier moment than the row before, and were put there.
        unknown_columns: Columns that nobody reads.
        features: Names of the features read.
    """

    rows: int = 0
    bad: int = 0
    first_bad: list[tuple[int, str]] = field(default_factory=list)
    moved: int = 0
    unknown_columns: list[str] = field(default_factory=list)
    features: list[str] = field(default_factory=list)

    def note(self, line: int, fault: str) -> None:
        """Count a bad row."""
        self.bad += 1
        if len(self.first_bad) < TOLD_MAX:
            self.first_bad.append((line, fault))

    def plain(self) -> dict[str, object]:
        """As data for a program."""
        return {
            "rows": self.rows,
            "bad_rows": self.bad,
            "first_bad_rows": [{"line": line, "fault": fault} for line, fault in self.first_bad],
            "rows_moved_forward_in_time": self.moved,
            "unknown_columns": self.unknown_columns,
            "features": self.features,
        }


def auctions(file: TextIO, told: Told) -> Iterator[Auction]:
    """
    Read a file that is open with newline="", row by row.

    Args:
        file: The CSV.
        told: Filled in on the way.

    Raises:
        NoAuctions: The first row does not name `highest_competing_cpm`.
    """
    reader = csv.DictReader(_without_nuls(file))
    names = list(reader.fieldnames or [])
    if NEEDED not in names:
        raise NoAuctions(f"The first row must name the column {NEEDED}.")
    found = [name for name in names if name.startswith(FEATURE)]
    told.features = [name.removeprefix(FEATURE) for name in found[:FEATURES_MAX]]
    told.unknown_columns = [
        name for name in names if name not in COLUMNS and name not in found[:FEATURES_MAX]
    ]
    before_ms: int | None = None
    while (row := _next(reader, told)) is not None:
        if isinstance(row, str):
            told.note(reader.line_num, row)
            continue
        auction = _auction(row, before_ms, told)
        if isinstance(auction, str):
            told.note(reader.line_num, auction)
            continue
        before_ms = auction.at_ms
        yield auction


def pieces(rows: Iterable[Auction], size: int) -> Iterator[list[Auction]]:
    """The same auctions in pieces of at most `size`."""
    piece = list[Auction]()
    for row in rows:
        piece.append(row)
        if len(piece) == size:
            yield piece
            piece = []
    if piece:
        yield piece


def _without_nuls(file: Iterable[str]) -> Iterator[str]:
    # The reader ends a whole file at one of them.
    return (line.replace("\0", "") for line in file)


def _next(reader: csv.DictReader[str], told: Told) -> Mapping[str | None, object] | str | None:
    """The next row, what is wrong with it, or None at the end."""
    try:
        row = next(reader, None)
    # One field without end must not take the rest of a long file with it.
    except csv.Error as error:
        told.rows += 1
        return f"not a row of CSV: {error}"
    if row is None:
        return None
    told.rows += 1
    surplus: Mapping[str | None, object] = dict(row)
    return "more fields than there are columns" if None in surplus else surplus


def _auction(row: Mapping[str | None, object], before_ms: int | None, told: Told) -> Auction | str:
    said = {str(name): str(text or "").strip() for name, text in row.items()}
    numbers = _numbers(said)
    if isinstance(numbers, str):
        return numbers
    at_ms = _moment(said.get("at", ""), before_ms)
    if at_ms is None:
        return "at is no time of RFC 3339 with an offset"
    if before_ms is not None and at_ms < before_ms:
        told.moved, at_ms = told.moved + 1, before_ms
    source = said.get("source") or "default"
    if len(source) > TEXT_MAX:
        return f"source is longer than {TEXT_MAX} characters"
    competing, value, floor, hint = numbers
    least = max(competing, floor)
    return Auction(
        at_ms, least, value, value or 0, floor, source, hint, _hashed(said, told.features)
    )


def _numbers(said: Mapping[str, str]) -> tuple[int, int | None, int, int | None] | str:
    """Competing bid, value, floor and hint in nanos, or what is wrong with one of them."""
    if not said[NEEDED]:
        return f"{NEEDED} is missing"
    competing = _price(said[NEEDED])
    floor = _price(said.get("floor_cpm", "")) if said.get("floor_cpm") else 0
    value = _amount(said["value"]) if said.get("value") else None
    hint = _amount(said["value_hint"]) if said.get("value_hint") else None
    if competing is None:
        return f"{NEEDED} is no price of at least 0"
    if floor is None:
        return "floor_cpm is no price of at least 0"
    if value is None and said.get("value"):
        return "value is no amount of at least 0"
    if hint is None and said.get("value_hint"):
        return "value_hint is no amount of at least 0"
    return competing, value, floor, hint


def _price(text: str) -> int | None:
    try:
        # Rounded up, a bid of just this price is enough; rounded down it might lose.
        price = money.price(text, money.UP)
    except money.NotMoney:
        return None
    return price if price >= 0 else None


def _amount(text: str) -> int | None:
    try:
        amount = money.nanos_rounded(text, money.HALF_EVEN)
    except money.NotMoney:
        return None
    return amount if amount >= 0 else None


def _moment(text: str, before_ms: int | None) -> int | None:
    if not text:
        return 0 if before_ms is None else before_ms + STEP_MS
    try:
        at = datetime.fromisoformat(text)
    except ValueError:
        return None
    # Without an offset nobody knows which day the money of a day belongs to.
    return None if at.tzinfo is None else round(at.timestamp() * 1000)


def _hashed(said: Mapping[str, str], names: list[str]) -> Hashed:
    features = {name: _feature(said[FEATURE + name]) for name in names if said[FEATURE + name]}
    return hashing.hashed(features, HASH_KEY) if features else ()


def _feature(text: str) -> Feature:
    if text in ("true", "false"):
        return text == "true"
    try:
        number = float(text)
    except ValueError:
        return text[:TEXT_MAX]
    # Not a number and infinity are text to a hash, as they equal nothing or everything.
    return number if number == number and abs(number) != float("inf") else text[:TEXT_MAX]
