"""What auctions told, per source and kind of auction, in at most 64 KiB; apart from the lessons.

The sources share the cells: when they need too many, all ticks are joined two by two. Joined
counts are those that coarser ticks would have given, but for a bid near its own tick.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass, field

from service.learner.curve_counts import ABOVE, COLUMNS, KEPT_WHOLE, PARTS, Counts
from service.learner.memory import UnreadableMemory
from service.learner.partition import Ticks
from service.learner.sealed import sealed, unsealed

FORM = 1
BYTES_MAX = 65_536
NAMED = 16  # Sources kept apart, each kind of auction alone; all further ones are pooled.
POOLED = ""  # No caller's source has an empty name.
CELLS = 800  # Halves four times without a rest, and so do the bids that are tried first.
TICK_MIN = 2
# Room for every row, whatever the names: the heads of all sources, and what stands before them.
ROWS_BYTES_MAX = BYTES_MAX - 128 - 4 * (NAMED + 1) - NAMED * 70

HEAD = struct.Struct(">3sBQBQQQH")
SOURCE = struct.Struct(">BBH")
ROW = struct.Struct(">HB")
COUNT = struct.Struct(">Q")
_BITS = tuple(1 << column for column in range(COLUMNS))
# The columns that a mask names, and how their counts are packed: all of a row at once.
_MASKED = [
    (columns, struct.Struct(f">{len(columns)}Q"))
    for columns in (
        tuple(column for column, bit in enumerate(_BITS) if mask & bit)
        for mask in range(1 << COLUMNS)
    )
]
NAME = b"mkt"
AUCTIONS = ("second", "first")

Key = tuple[str, str]
Rows = dict[int, list[int]]


class UnreadableMarket(UnreadableMemory):
    """The bytes are not the state of the form we write, or of other ticks."""


@dataclass(slots=True)
class MarketState:
    """
    Counts while they are added to.

    Args:
        top: Largest price of the ticks, in nanos.
        level: How often the ticks were joined.
        clock_ms: Service time of the last lesson.
        rounds: Rounds so far.
        forgotten: How many pieces of time or rounds the counts have been discounted for.
        sources: Place and five counts, by auction and source.
        used: Bytes that the rows of all sources take.
    """

    top: int
    level: int = 0
    clock_ms: int = 0
    rounds: int = 0
    forgotten: int = 0
    sources: dict[Key, Rows] = field(default_factory=dict)
    used: int = field(init=False)

    def __post_init__(self) -> None:
        self.used = sum(map(_size, self.sources.values()))

    @property
    def ticks(self) -> Ticks:
        """The ticks of now."""
        return Ticks(self.top, max(TICK_MIN, self.top // CELLS) << self.level)

    def key_of(self, auction: str, source: str) -> Key:
        """Where a source of this kind of auction is counted; the first to come have names."""
        key = auction, source
        if key in self.sources or sum(name != POOLED for _, name in self.sources) < NAMED:
            return key
        return auction, POOLED

    def count(self, key: Key, place: int, column: int) -> None:
        """Add one auction, and join ticks when it needs too many cells."""
        row = self.sources.setdefault(key, {}).setdefault(place, [0] * COLUMNS)
        fresh = not row[column]
        row[column] += PARTS
        if fresh:
            self.used += COUNT.size + (0 if sum(map(bool, row)) > 1 else ROW.size)
            while self.used > ROWS_BYTES_MAX and self.ticks.cells > 1:
                self._join()

    def keep(self, kept: int) -> None:
        """Keep `kept` parts in 2^32 of every count, rounded down."""
        for key, rows in self.sources.items():
            less = {p: [one * kept // KEPT_WHOLE for one in row] for p, row in rows.items()}
            self.sources[key] = {place: row for place, row in less.items() if any(row)}
        self.used = sum(map(_size, self.sources.values()))

    def counts(self, key: Key) -> Counts:
        """The counts of one source, none where nothing was told."""
        rows = sorted(self.sources.get(key, {}).items())
        return Counts(self.ticks, tuple((p, (a, b, c, d, e)) for p, (a, b, c, d, e) in rows))

    def to_bytes(self) -> bytes:
        """Equal states give equal bytes; 11 for most places visited, at most 43."""
        numbers = self.top, self.level, self.clock_ms, self.rounds, self.forgotten
        parts = [HEAD.pack(NAME, FORM, *numbers, len(self.sources))]
        for (auction, source), rows in sorted(self.sources.items()):
            name = source.encode()
            parts += [SOURCE.pack(AUCTIONS.index(auction), len(name), len(rows)), name]
            parts += [_packed(place, row) for place, row in sorted(rows.items())]
        body = b"".join(parts)
        return sealed(body)

    def _join(self) -> None:
        fine, self.level = self.ticks, self.level + 1
        cells = (fine.cells, self.ticks.cells)
        self.sources = {key: _joined(rows, *cells) for key, rows in self.sources.items()}
        self.used = sum(map(_size, self.sources.values()))


def joined(counts: Counts, cells_max: int) -> Counts:
    """The same counts on ticks joined until there are at most so many cells."""
    ticks, rows = counts.ticks, {place: list(row) for place, row in counts.rows}
    while ticks.cells > cells_max:
        coarse = Ticks(ticks.top, ticks.tick * 2)
        ticks, rows = coarse, _joined(rows, ticks.cells, coarse.cells)
    kept = sorted(rows.items())
    return Counts(ticks, tuple((p, (a, b, c, d, e)) for p, (a, b, c, d, e) in kept))


def read(state: bytes, first_only: bool = False) -> MarketState:
    """
    Read what `to_bytes` wrote.

    Args:
        state: From there.
        first_only: Leave out what is not of first-price auctions. It comes later in the bytes,
            so a line item that never shades reads nothing with each snapshot.

    Raises:
        UnreadableMarket: Another form, or not whole.
    """
    body, sound = unsealed(state)
    if len(body) < HEAD.size or not sound:
        raise UnreadableMarket("not whole")
    name, form, top, level, clock_ms, rounds, forgotten, sources = HEAD.unpack_from(body)
    if (name, form) != (NAME, FORM):
        raise UnreadableMarket("another form")
    try:
        found = _sources(body, sources, first_only)
    except (struct.error, IndexError, UnicodeDecodeError) as error:
        raise UnreadableMarket("cut short") from error
    return MarketState(top, level, clock_ms, rounds, forgotten, found)


def _sources(body: bytes, sources: int, first_only: bool) -> dict[Key, Rows]:
    found: dict[Key, Rows] = {}
    at = HEAD.size
    for _ in range(sources):
        auction, length, places = SOURCE.unpack_from(body, at)
        if first_only and AUCTIONS[auction] != "first":
            break
        at += SOURCE.size + length
        rows: Rows = {}
        for _ in range(places):
            place, mask = ROW.unpack_from(body, at)
            columns, counts = _MASKED[mask % len(_MASKED)]
            rows[place] = row = [0] * COLUMNS
            for column, one in zip(columns, counts.unpack_from(body, at + ROW.size), strict=True):
                row[column] = one
            at += ROW.size + counts.size
        start = at - _size(rows) - length
        found[AUCTIONS[auction], body[start : start + length].decode()] = rows
    return found


def _size(rows: Rows) -> int:
    empty = sum(row.count(0) for row in rows.values())
    return len(rows) * (ROW.size + COUNT.size * COLUMNS) - COUNT.size * empty


def _packed(place: int, row: list[int]) -> bytes:
    mask = sum(bit for bit, one in zip(_BITS, row, strict=True) if one)
    return ROW.pack(place, mask) + _MASKED[mask][1].pack(*filter(None, row))


def _joined(rows: Rows, fine: int, coarse: int) -> Rows:
    """What stands above a bid moves to the tick below it, all else to the tick above."""
    joined: Rows = {}
    for place, row in rows.items():
        for column, one in enumerate(row):
            if one:
                at = _place(place, column, fine, coarse)
                joined.setdefault(at, [0] * COLUMNS)[column] += one
    return joined


def _place(place: int, column: int, fine: int, coarse: int) -> int:
    if place >= fine:
        # The top stays the top, and what no bid could beat stays beyond it.
        return coarse + place - fine
    if column == ABOVE:
        return min(place // 2, coarse - 1)
    return min((place + 1) // 2, coarse)
