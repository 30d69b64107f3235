"""`bidkeel bench decide`: what one price costs, step by step and method by method."""

from __future__ import annotations

import argparse
import cProfile
import io
import json
import pstats
import statistics
import sys
import timeit
from collections.abc import Callable
from functools import partial

import numpy as np
from rich.console import Console

from service.commands import bodies, options, report
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.price import Ready, ready
from service.guard.ticket import Ticket, TicketKeys
from service.learner import hashing
from service.learner.fold import fold
from service.learner.memory import Memory
from service.rehearsal.lesson_stream import LEARNERS, Stream

LESSONS, QUICK_LESSONS = 20_000, 2000
REPEATS = 7
CALLS, QUICK_CALLS = 20_000, 1000
# Any key will do: hashing costs the same under each.
FEATURE_KEY = b"bench"
PROFILED_LINES = 25
TIMED = sorted(name for name, method in METHODS.items() if method.learns)
AIMS_US = {"linear": 30.0}
AIM_US, TICKET_AIM_US = 5.0, 6.0


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=7, help="chooses the lessons")
    parser.add_argument("--quick", action="store_true", help="fewer lessons and calls")
    parser.add_argument("--profile", choices=TIMED, help="show where its time goes")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Time each method's price and each step around it.

    Returns:
        0; times depend on the machine and decide nothing.
    """
    lessons = QUICK_LESSONS if arguments.quick else LESSONS
    calls = QUICK_CALLS if arguments.quick else CALLS
    if arguments.profile:
        sys.stdout.write(profiled(learnt(arguments.profile, lessons, arguments.seed), calls))
        return 0
    found = dict[str, list[float]]()
    with report.progress() as bar:
        task = bar.add_task("Methods", total=len(TIMED) + 1)
        for name in TIMED:
            found[name] = timed(asking(learnt(name, lessons, arguments.seed)), calls)
            bar.advance(task)
        found.update({name: timed(step, calls) for name, step in steps().items()})
        bar.advance(task)
    _show(found, arguments)
    return 0


def learnt(method: str, lessons: int, seed: int) -> Ready:
    """A snapshot of a line item with this method after so many lessons."""
    learner = LEARNERS[method]
    stream, memory = Stream(learner.rules, seed), Memory.fresh()
    folded = 0
    # By what it has learnt so far, as a worker's next batch is.
    while folded < lessons:
        batch = stream.batch(memory)
        memory = fold(memory, batch, learner.rules)
        folded += len(batch)
    return ready(memory, learner.terms)


def asking(snapshot: Ready) -> Callable[[], object]:
    """One question of a snapshot, with features hashed where the method reads them."""
    generator = np.random.default_rng(1)
    hashed = hashing.hashed(bodies.FEATURES, FEATURE_KEY)
    opportunity = Opportunity("bench", source="north-exchange", hashed=hashed)
    return partial(snapshot.propose, opportunity, generator)


def steps() -> dict[str, Callable[[], object]]:
    """The steps around a price."""
    keys = TicketKeys([b"k" * 32])
    ticket = Ticket("bench", "north-exchange", b"s" * 16, 3, 1234, 812, 739_000, b"i" * 8)
    text = keys.sign(ticket)
    return {
        "ticket, sign": lambda: keys.sign(ticket),
        "ticket, verify": lambda: keys.verify(text),
        "ticket, both": lambda: keys.verify(keys.sign(ticket)),
        "features, hash": lambda: hashing.hashed(bodies.FEATURES, FEATURE_KEY),
    }


def timed(step: Callable[[], object], calls: int) -> list[float]:
    """Seconds for each call, one figure for each repeat."""
    took = timeit.repeat(step, number=calls, repeat=REPEATS)
    return [seconds / calls for seconds in took]


def profiled(snapshot: Ready, calls: int) -> str:
    """Where the time of one snapshot's answers goes."""
    ask, profile, said = asking(snapshot), cProfile.Profile(), io.StringIO()
    with profile:
        for _ in range(calls):
            ask()
    pstats.Stats(profile, stream=said).sort_stats("tottime").print_stats(PROFILED_LINES)
    return said.getvalue()


def _aim(name: str) -> float | None:
    if name in METHODS:
        return AIMS_US.get(name, AIM_US)
    return TICKET_AIM_US if name == "ticket, both" else None


def _show(found: dict[str, list[float]], arguments: argparse.Namespace) -> None:
    if arguments.json:
        sys.stdout.write(json.dumps(found) + "\n")
        return
    rows = {
        name: (
            # The least is what the code costs; whatever is above it is the machine's.
            f"{1e6 * min(took):.2f}",
            f"{1e6 * statistics.median(took):.2f}",
            f"{1e6 * max(took):.2f}",
            "" if (aim := _aim(name)) is None else f"{aim:.0f}",
        )
        for name, took in found.items()
    }
    heads = ["least us", "median us", "most us", "aim us"]
    Console().print(report.table(f"One price, {REPEATS} repeats, wall clock", heads, rows))
