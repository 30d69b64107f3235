"""`bidkeel bench hindsight`: does the truth lie inside hindsight's intervals, on logs whose truth
is known?"""

from __future__ import annotations

import argparse
import math
import os

from rich.console import Console

from service.commands import options, report
from service.rehearsal.hindsight_coverage import Held, covered, joined
from service.rehearsal.processes import spread

ALWAYS = "without a model"
LEVEL = 0.95
NOTES = (
    "Each log hides rivals and values as a real one does. An interval without a model must hold "
    "the truth always; a labelled one at its level where its assumption holds, as it does here. "
    "The truth of a labelled line is what is earned on average.",
    "IPS, SNIPS and DR have limits by the normal approximation, which is a little short of its "
    "level on logs of this length; limits called a rough guide promise none.",
)


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--logs", type=options.count, default=1000, help="how many logs")
    parser.add_argument("--seed", type=options.seed, default=7, help="the first log's seed")
    parser.add_argument(
        "--processes", type=options.count, default=os.cpu_count(), help="how many work at once"
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Look at every log and show the counts.

    Returns:
        0 when every interval without a model held the truth and no labelled one fell short of
        its level by more than chance; 1 when not.
    """
    seeds = range(arguments.seed, arguments.seed + arguments.logs)
    with report.progress() as bar:
        task = bar.add_task("Logs", total=len(seeds))
        found = []
        for _, one in spread(covered, seeds, arguments.processes):
            found.append(one)
            bar.advance(task)
    total = joined(found)
    _show(total, arguments.logs, for_a_program=arguments.json)
    return 1 if broken(total) else 0


def broken(total: dict[str, Held]) -> list[str]:
    """The intervals that held the truth less often than they promise."""
    return [name for name, held in total.items() if held.held < _least(name, held.looked)]


def _least(name: str, looked: int) -> float:
    if name.startswith(ALWAYS):
        return looked
    if "rough" in name:
        return 0.0
    # Four standard errors of a count, and one in a hundred for a normal approximation.
    slack = 0.01 if "control" in name else 0.0
    level = LEVEL - slack
    return looked * level - 4.0 * math.sqrt(looked * level * (1.0 - level))


def _show(total: dict[str, Held], logs: int, *, for_a_program: bool) -> None:
    console = Console()
    missed = broken(total)
    if for_a_program:
        figures = {name: {"held": one.held, "looked": one.looked} for name, one in total.items()}
        console.print_json(data={"logs": logs, "intervals": figures, "broken": missed})
        return
    rows = {
        name: [f"{one.held:,}", f"{one.looked:,}", report.share(one.held, one.looked)]
        for name, one in sorted(total.items(), reverse=True)
    }
    title = f"Truth inside the interval, {logs:,} invented logs"
    console.print(report.table(title, ["held", "looked at", "share"], rows))
    for line in (*NOTES, *(f"BROKEN: {name}" for name in missed)):
        console.print(line, highlight=False)
    if not missed:
        console.print("Every interval keeps what it promises.")
