"""How bids fare as the log of decisions grows, and what a log of a year would come to."""

from __future__ import annotations

import argparse
import math
import time
from contextlib import closing
from dataclasses import dataclass

from service.commands.figures import Figure
from service.commands.growth_ground import (
    FLAT_MAX,
    SCALAR,
    Ground,
    Say,
    asked,
    by_turns,
    flat,
    line_items,
    name_of,
)
from service.commands.server_process import ServerProcess
from service.store import decisions
from service.store.database import Database

# Few enough for one statement, many enough that its overhead does not count.
LOGGED_AT_ONCE = 10_000
DAY_MS = 86_400_000
FIRST = 100_000
FAR = 100_000_000
GIB = 1024.0**3


@dataclass(frozen=True, slots=True)
class Point:
    """
    A log of so many decisions.

    Args:
        grown: p50 over that of an empty log, in the quietest rounds of both.
    """

    decisions: int
    grown: float
    kept_bytes: int


async def log(ground: Ground, arguments: argparse.Namespace, say: Say) -> list[Figure]:
    """From an empty log to a large one, step by step, beside a server whose log stays short."""
    small, _ = await ground.server("small", line_items(1, SCALAR))
    grown, _ = await ground.server("log", line_items(1, SCALAR))
    begins, done = ground.kept_bytes("log"), 0
    found, points = list[Figure](), list[Point]()
    for count in steps(arguments.decisions):
        fill(grown, name_of(0), count - done, say)
        done = count
        say(f"bids on a log of {count:,} decisions")
        before, after = await by_turns(
            [asked(one, [name_of(0)]) for one in (small, grown)], arguments
        )
        here = flat(f"0 to {count:,} decisions in the log", before, after)
        found += here
        points.append(Point(count, here[1].figure, ground.kept_bytes("log") - begins))
    return [*found, *projected(points[-2], points[-1])]


def steps(most: int) -> list[int]:
    """Where to look on the way to the last size: at each power of ten, at two places at least."""
    powers = [10**power for power in range(round(math.log10(FIRST)), 12) if 10**power < most]
    return [*(powers or [max(1, most // 10)]), most]


def projected(first: Point, last: Point) -> list[Figure]:
    """What the last two looks come to at a hundred million decisions."""
    # A larger log makes no bid quicker: a fall is noise.
    rise = max(0.0, last.grown - first.grown)
    # The log is only written to, through trees whose depth grows with the logarithm.
    decades = math.log10(FAR / last.decisions) / math.log10(last.decisions / first.decisions)
    each = (FAR - last.decisions) / (last.decisions - first.decisions)
    size = (last.kept_bytes - first.kept_bytes) / (last.decisions - first.decisions)
    far = f"{FAR:,} decisions, projected"
    return [
        Figure(
            f"{far} by decades, bid p50 over an empty log's",
            *(last.grown + rise * decades, "times"),
            aim=FLAT_MAX,
        ),
        Figure(f"{far} in proportion, bid p50", last.grown + rise * each, "times"),
        Figure("a decision on disk", size, "bytes"),
        Figure(f"{far}, on disk", FAR * size / GIB, "GiB"),
    ]


def fill(
    server: ServerProcess, name: str, count: int, say: Say, ended_days_ago: float = 0.0
) -> None:
    """Fill the decision log in bulk, as a worker writes it, spread over a day."""
    end_ms = time.time_ns() // 1_000_000 - int(ended_days_ago * DAY_MS)
    row = {"ref": "r" * 22, "request_id": "op-81f2", "source": "north-exchange", "floor": 400_000}
    row |= {"price": 1_000_000, "reason": None, "set_by": "value", "snapshot": 1, "test": 0}
    row |= {"line_item": name, "auction": "second"}
    with closing(Database(server.environment["BIDKEEL_DATABASE_URL"])) as database:
        for done in range(0, count, LOGGED_AT_ONCE):
            numbers = range(done, min(done + LOGGED_AT_ONCE, count))
            rows = [{**row, "at_ms": end_ms - DAY_MS + DAY_MS * n // count} for n in numbers]
            decisions.log(database, rows)
            say(f"{done + len(rows):,} of {count:,} decisions logged")
