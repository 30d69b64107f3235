"""`bidkeel bench growth`: whether bids stay as quick as line items, log and lessons grow."""

from __future__ import annotations

import argparse
import tempfile
from collections.abc import Awaitable, Callable
from contextlib import ExitStack
from functools import partial
from pathlib import Path

from service.commands import figures, load, options, report
from service.commands.figures import Figure
from service.commands.growth_busy import busy
from service.commands.growth_fresh import fresh
from service.commands.growth_ground import COVARIATE, SCALAR, Ground, Say
from service.commands.growth_items import crowd, items
from service.commands.growth_lessons import lessons
from service.commands.growth_log import log
from service.commands.postgresql_process import PostgreSQLProcess

Section = Callable[[Ground, argparse.Namespace, Say], Awaitable[list[Figure]]]
SECTIONS: dict[str, Section] = {
    "items": items,
    "crowd": crowd,
    "fresh": fresh,
    "busy": busy,
    "lessons": lessons,
    "decisions": log,
}
NOTES = (
    "Before and after, few and many, quiet and busy are asked by turns in one run. Memory is "
    "that of the processes that answer bids.",
    "Busy: the same rate while wins are booked and taught, the log is written and a second "
    "process prunes old decisions by the clerk's own function.",
    "Projected from the quietest rounds. By decades: the log is only written to, through trees "
    "whose depth grows with the logarithm; in proportion: if the last rise went on for each "
    "further decision.",
)


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument(
        "--only",
        nargs="+",
        choices=SECTIONS,
        default=list(SECTIONS),
        metavar="NAME",
        help=f"sections to measure instead of all: {', '.join(SECTIONS)}",
    )
    options.add_database(parser)
    numbers = {
        "line-items": (10_000, "to grow to"),
        "decisions": (10_000_000, "in the log, to grow to"),
        "lessons": (1_000_000, "of one line item, to grow to"),
        "active": (200, "line items that are asked where not all are: of many, and of linear"),
        "rate": (1000, "bids a second"),
        "bids": (10_000, "for each figure, over all rounds"),
        "rounds": (5, "of each figure that is taken by turns"),
        "probes": (100, "of freshness, for each figure"),
    }
    for name, (usual, text) in numbers.items():
        parser.add_argument(
            f"--{name}", type=options.count, default=usual, help=f"{text}; {usual:,} unless given"
        )
    methods = [SCALAR, COVARIATE]
    parser.add_argument(
        "--method", nargs="+", choices=methods, default=methods, help="of freshness and lessons"
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Let servers grow section by section and time bids at an even rate beside small ones.

    Returns:
        0 when every aim was reached, 1 when one was not.
    """
    with ExitStack() as stack:
        folder = Path(stack.enter_context(tempfile.TemporaryDirectory()))
        postgresql = arguments.database == "postgresql"
        database = stack.enter_context(PostgreSQLProcess()) if postgresql else None
        ground = stack.enter_context(Ground(folder, database))
        found = load.run(_measured(ground, arguments))
    if arguments.json:
        figures.write(found)
    else:
        rate = f"bids at {arguments.rate:,} a second unless said otherwise"
        figures.show(f"Growth, {arguments.database}, {rate}", found, *NOTES)
    return 0 if figures.all_reached(found) else 1


def _said(show: Say, section: str, text: str) -> None:
    show(f"{section}: {text}")


async def _measured(ground: Ground, arguments: argparse.Namespace) -> list[Figure]:
    found, sections = list[Figure](), list(dict.fromkeys(arguments.only))
    with report.progress() as bar:
        task = bar.add_task("", total=len(sections))
        for name in sections:
            say = partial(_said, lambda text: bar.update(task, description=text), name)
            found += await SECTIONS[name](ground, arguments, say)
            bar.advance(task)
    return found
