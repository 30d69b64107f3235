"""`bidkeel bench learn`: how fast each method's lessons are folded, and that it stays so."""

from __future__ import annotations

import argparse
import statistics
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from rich.console import Console

from service.commands import figures, options, report
from service.commands.figures import Figure
from service.commands.profiling import add_profile, profiled
from service.decision.price import ready
from service.decision.terms import Terms
from service.learner.fold import Lesson, fold
from service.learner.memory import Memory
from service.rehearsal.lesson_stream import BATCH, LEARNERS, Learner, Stream

SIZES, QUICK_SIZES = (10, 1000, 100_000, 1_000_000), (10, 1000, 10_000)
TIMED = 9
# Of the cost per lesson from the first size to the last. Work that grew with the number of
# lessons would make it a hundred thousand; a tree packs up to 2,048 ticks once a batch, and the
# first batch finds none yet.
GROWTH_MAX = 5.0


@dataclass(frozen=True, slots=True)
class Stage:
    """What a learner knew after so many lessons, and the batch that came next."""

    lessons: int
    memory: Memory
    batch: Sequence[Lesson]


@dataclass(frozen=True, slots=True)
class Reading:
    """What one learner costs after so many lessons: processor seconds a lesson and a price."""

    lessons: int
    folds_s: tuple[float, ...]
    price_s: float
    state_bytes: int

    @property
    def fold_s(self) -> float:
        """The median of the folds of one batch."""
        return statistics.median(self.folds_s)


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=7, help="chooses the lessons")
    parser.add_argument("--quick", action="store_true", help="10,000 lessons in place of 10^6")
    parser.add_argument(
        "--only",
        nargs="+",
        choices=LEARNERS,
        default=list(LEARNERS),
        metavar="NAME",
        help=f"learners to time instead of all: {'; '.join(LEARNERS)}",
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")
    add_profile(parser)


def run(arguments: argparse.Namespace) -> int:
    """
    Fold for every learner and show what it costs.

    Returns:
        0 when no learner's cost per lesson grows more than fivefold from the first size to the
        last, 1 when one's does.
    """
    sizes, found = QUICK_SIZES if arguments.quick else SIZES, dict[str, list[Reading]]()
    with report.progress() as bar, profiled(arguments.profile):
        task = bar.add_task("Lessons", total=len(arguments.only) * sizes[-1])
        for name in dict.fromkeys(arguments.only):
            stages = learnt(
                LEARNERS[name], sizes, arguments.seed, lambda done: bar.advance(task, done)
            )
            found[name] = read(LEARNERS[name], stages)
    told = [one for name, readings in found.items() for one in _figures(name, readings)]
    if arguments.json:
        figures.write(told)
    else:
        _show(found, sizes)
    return 0 if figures.all_reached(told) else 1


def learnt(
    learner: Learner, sizes: Sequence[int], seed: int, advance: Callable[[int], object]
) -> list[Stage]:
    """
    Fold batch by batch, as a clerk does, and keep what was known at each size.

    Args:
        learner: Whose lessons.
        sizes: Numbers of lessons, ascending; each is passed by a batch at most.
        seed: Chooses the lessons.
        advance: Called with the number of lessons just folded.
    """
    stream, memory, folded = Stream(learner.rules, seed), Memory.fresh(), 0
    stages = list[Stage]()
    for size in sizes:
        while folded < size:
            # A whole batch would pass the first size by far.
            lessons = stream.batch(memory)[: size - folded]
            memory = fold(memory, lessons, learner.rules)
            folded += len(lessons)
            advance(len(lessons))
        stages.append(Stage(folded, memory, stream.batch(memory)))
    return stages


def read(learner: Learner, stages: Sequence[Stage]) -> list[Reading]:
    """Fold the next batch of every stage by turns, so that all meet the same noise."""
    took: list[list[float]] = [[] for _ in stages]
    for _ in range(TIMED):
        for stage, found in zip(stages, took, strict=True):
            found.append(_fold_s(learner, stage))
    return [
        Reading(
            stage.lessons,
            tuple(found),
            statistics.median(_price_s(stage.memory, learner.terms) for _ in range(TIMED)),
            len(stage.memory.to_bytes()),
        )
        for stage, found in zip(stages, took, strict=True)
    ]


def growths(readings: Sequence[Reading]) -> list[float]:
    """How many times the cost per lesson of the first size it is at the last, turn by turn."""
    pairs = zip(readings[0].folds_s, readings[-1].folds_s, strict=True)
    return [last / first for first, last in pairs]


def growth(readings: Sequence[Reading]) -> float:
    """Their median."""
    return statistics.median(growths(readings))


def _fold_s(learner: Learner, stage: Stage) -> float:
    # Of the processor, so that whatever else runs on the machine does not count. The fold is
    # pure, so the same batch may be folded again.
    begun = time.process_time()
    fold(stage.memory, stage.batch, learner.rules)
    return (time.process_time() - begun) / len(stage.batch)


def _price_s(memory: Memory, terms: Terms) -> float:
    begun = time.process_time()
    ready(memory, terms)
    return time.process_time() - begun


def _figures(name: str, readings: Sequence[Reading]) -> list[Figure]:
    last = readings[-1]
    span = f"from {readings[0].lessons:,} to {last.lessons:,} lessons"
    return [
        figures.of_rounds(f"{name}, growth {span}", "times", growths(readings), GROWTH_MAX),
        *(
            figures.of_rounds(
                f"{name}, a lesson after {one.lessons:,}", "us", [1e6 * s for s in one.folds_s]
            )
            for one in readings
        ),
        Figure(f"{name}, lessons", 1.0 / last.fold_s, "a second"),
        Figure(f"{name}, a snapshot made ready", 1e6 * last.price_s, "us"),
        Figure(f"{name}, state", last.state_bytes, "bytes"),
    ]


def _show(found: dict[str, list[Reading]], sizes: tuple[int, ...]) -> None:
    heads = [
        "lessons/s",
        *(f"us at {size:,}" for size in sizes),
        *("growth", "from, to", "price (us)", "state (bytes)"),
    ]
    rows = {name: _cells(readings) for name, readings in found.items()}
    console = Console(width=figures.WIDTH)
    console.print(report.table("Folding lessons, one process", heads, rows))
    console.print(
        f"Processor time a lesson, in microseconds, of a batch of {BATCH} impressions that comes "
        f"after so many lessons; medians of {TIMED} turns. Growth: the last size over the first. "
        "Methods without a tree share one fold. 'price' makes a snapshot ready once.",
        highlight=False,
    )


def _cells(readings: list[Reading]) -> list[str]:
    last, grown = readings[-1], growths(readings)
    return [
        f"{1.0 / last.fold_s:,.0f}",
        *(f"{1e6 * reading.fold_s:.1f}" for reading in readings),
        f"{growth(readings):.2f}",
        f"{min(grown):.2f} to {max(grown):.2f}",
        f"{1e6 * last.price_s:.0f}",
        f"{last.state_bytes:,}",
    ]
