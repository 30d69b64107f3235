"""`bidkeel bench learn`: how fast each method's lessons are folded, and that it stays so."""

from __future__ import annotations

import argparse
import statistics
import time
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass

from rich.console import Console

from service.commands import options, report
from service.decision.price import ready
from service.decision.terms import Terms
from service.learner.fold import fold
from service.learner.memory import Memory
from service.rehearsal.lesson_stream import BATCH, LEARNERS, Learner, Stream

SIZES, QUICK_SIZES = (1000, 10_000, 100_000), (1000, 4000, 10_000)
TIMED = 9  # The median of the last so many batches before each size counts.
# Of the cost per lesson from the first size to the last. Work that grew with the number of
# lessons would make it a hundred; a tree packs up to 2,048 ticks once a batch, and no more.
GROWTH_MAX = 5.0


@dataclass(frozen=True, slots=True)
class Reading:
    """What one learner costs after so many lessons: processor seconds a lesson and a price."""

    lessons: int
    fold_s: float
    price_s: float
    state_bytes: int


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=7, help="chooses the lessons")
    parser.add_argument("--quick", action="store_true", help="10,000 lessons in place of 100,000")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Fold for every learner and show what it costs.

    Returns:
        0 when no learner's cost per lesson grows more than fivefold from the first size to the
        last, 1 when one's does.
    """
    sizes, found = QUICK_SIZES if arguments.quick else SIZES, dict[str, list[Reading]]()
    with report.progress() as bar:
        task = bar.add_task("Lessons", total=len(LEARNERS) * sizes[-1])
        for name, learner in LEARNERS.items():
            found[name] = read(learner, sizes, arguments.seed, lambda done: bar.advance(task, done))
    _show(found, sizes, arguments.json)
    return 0 if all(growth(readings) <= GROWTH_MAX for readings in found.values()) else 1


def read(
    learner: Learner, sizes: tuple[int, ...], seed: int, advance: Callable[[int], object]
) -> list[Reading]:
    """
    Fold batch by batch, as a worker does, and read the cost at each size.

    Args:
        learner: Whose lessons.
        sizes: Numbers of lessons after which to time the next few batches, ascending.
        seed: Chooses the lessons.
        advance: Called with the number of lessons just folded.
    """
    rules, stream, memory = learner.rules, Stream(learner.rules, seed), Memory.fresh()
    folded, took, readings = 0, deque[float](maxlen=TIMED), list[Reading]()
    for size in sizes:
        while folded < size:
            lessons = stream.batch(memory)
            # Of the processor, so that whatever else runs on the machine does not count.
            begun = time.process_time()
            memory = fold(memory, lessons, rules)
            took.append((time.process_time() - begun) / len(lessons))
            folded += len(lessons)
            advance(len(lessons))
        price_s = statistics.median(_price_s(memory, learner.terms) for _ in range(TIMED))
        fold_s = statistics.median(took)
        readings.append(Reading(folded, fold_s, price_s, len(memory.to_bytes())))
    return readings


def growth(readings: list[Reading]) -> float:
    """How many times the cost per lesson of the first size it is at the last."""
    return readings[-1].fold_s / readings[0].fold_s


def _price_s(memory: Memory, terms: Terms) -> float:
    begun = time.process_time()
    ready(memory, terms)
    return time.process_time() - begun


def _show(found: dict[str, list[Reading]], sizes: tuple[int, ...], for_a_program: bool) -> None:
    console = Console()
    if for_a_program:
        console.print_json(data={"learners": {name: _data(rows) for name, rows in found.items()}})
        return
    heads = [
        "lessons/s",
        *(f"us at {size:,}" for size in sizes),
        "growth",
        "price (us)",
        "state (bytes)",
    ]
    rows = {name: _cells(readings) for name, readings in found.items()}
    console.print(report.table("Folding lessons, one process", heads, rows))
    console.print(
        f"Batches of {BATCH} impressions, the median of the last {TIMED}; microseconds of "
        "processor time a lesson, after so many lessons. Methods without a tree share one fold. "
        "'price' makes a snapshot ready once.",
        highlight=False,
    )


def _cells(readings: list[Reading]) -> list[str]:
    last = readings[-1]
    return [
        f"{1.0 / last.fold_s:,.0f}",
        *(f"{1e6 * reading.fold_s:.1f}" for reading in readings),
        f"{growth(readings):.2f}",
        f"{1e6 * last.price_s:.0f}",
        f"{last.state_bytes:,}",
    ]


def _data(readings: list[Reading]) -> dict[str, object]:
    return {
        "lessons": [reading.lessons for reading in readings],
        "fold_s": [reading.fold_s for reading in readings],
        "price_s": [reading.price_s for reading in readings],
        "state_bytes": [reading.state_bytes for reading in readings],
        "growth": growth(readings),
    }
