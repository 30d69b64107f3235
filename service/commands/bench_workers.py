"""`bidkeel bench workers`: two workers on PostgreSQL against one, both crews by turns in one run.

Apart from the bench of the edge, which holds us against something else and not against ourselves.
"""

from __future__ import annotations

import argparse
import tempfile
import time
from collections.abc import Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

from service.commands import bodies, figures, load, options, pinning, planting, report
from service.commands.contests import COVARIATE, SCALAR
from service.commands.figures import Figure
from service.commands.postgresql_process import PostgreSQLProcess
from service.commands.server_process import ServerProcess

ONE, TWO = 1, 2
# More than for one worker, so that each of two gets its share of them.
CONNECTIONS = 32
GAIN = 1.7
# Two workers, the database and the load; on fewer they take each other's time.
ENOUGH = 4


@dataclass(frozen=True, slots=True)
class Round:
    """What one crew did in one round; processor time of a request, in microseconds."""

    rate: float
    workers_us: float
    load_us: float
    busier_share: float
    wrong: int


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--rounds", type=options.count, default=7, help="of each crew, by turns")
    parser.add_argument("--requests", type=options.count, default=6000, help="in a round")
    traffic = ("single", "mixed")
    parser.add_argument(
        "--traffic", choices=traffic, default="single", help="bids one by one, or with all else"
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Put the same load on a crew of one worker and on one of two by turns.

    Returns:
        0 when two do as much more as aimed at, 1 when they do not; 3 when an answer was wrong.
    """
    with ExitStack() as stack:
        folder = Path(stack.enter_context(tempfile.TemporaryDirectory()))
        database = stack.enter_context(PostgreSQLProcess())
        crews = {count: stack.enter_context(_crew(folder, database, count)) for count in (ONE, TWO)}
        played = load.run(_played(crews, arguments))
    found = compared(played[ONE], played[TWO], pinning.processors())
    if arguments.json:
        figures.write(found)
    else:
        title = f"Two workers against one, PostgreSQL, {arguments.rounds} rounds by turns"
        figures.show(title, found, said(pinning.processors()))
    if any(one.wrong for rounds in played.values() for one in rounds):
        return 3
    return 0 if figures.all_reached(found) else 1


def compared(one: Sequence[Round], two: Sequence[Round], processors: int) -> list[Figure]:
    """Both crews round by round; where processors are too few their time is judged instead."""
    rates = [both.rate / alone.rate for alone, both in zip(one, two, strict=True)]
    # With a processor each two workers do twice what one does, less what each spends more.
    worth = [TWO * alone.workers_us / both.workers_us for alone, both in zip(one, two, strict=True)]
    enough = processors >= ENOUGH
    return [
        figures.of_rounds(
            "rate of two workers over one", "times", rates, GAIN if enough else None, at_least=True
        ),
        figures.of_rounds(
            *("the same by their processor time, with a processor each", "times", worth),
            None if enough else GAIN,
            at_least=True,
        ),
        *_of_crew("one worker", one),
        *_of_crew("two workers", two),
        figures.of_rounds("busier of the two workers", "share", [r.busier_share for r in two]),
        figures.of_rounds("load, processor time", "us a request", [r.load_us for r in one]),
        Figure("processors here", processors, ""),
    ]


def said(processors: int) -> str:
    """What the figures are worth on a machine with so many processors."""
    if processors >= ENOUGH:
        return (
            f"{processors} processors: each worker, the database and the load have one of "
            "their own, so the rates say what a second worker brings."
        )
    return (
        f"Only {processors} processors here for two workers, PostgreSQL and the load, which need "
        f"{ENOUGH}: the rates say little of a second worker. Judged is what each worker spends on "
        "a request, which says what two would do with a processor each if nothing else ran short."
    )


def _of_crew(name: str, rounds: Sequence[Round]) -> list[Figure]:
    return [
        figures.of_rounds(f"{name}, rate", "requests a second", [one.rate for one in rounds]),
        figures.of_rounds(
            f"{name}, processor time of workers",
            *("us a request", [one.workers_us for one in rounds]),
        ),
    ]


def _crew(folder: Path, database: PostgreSQLProcess, count: int) -> ServerProcess:
    """A server with so many workers and a database of its own, so that nothing else differs."""
    place = folder / str(count)
    place.mkdir()
    settings = {
        "BIDKEEL_DATABASE_URL": database.new_database(f"crew_{count}"),
        "BIDKEEL_WORKERS": str(count),
        "BIDKEEL_DEADLINE_MS_MAX": str(bodies.PATIENT_MS),
    }
    return ServerProcess(place, settings)


async def _played(
    crews: dict[int, ServerProcess], arguments: argparse.Namespace
) -> dict[int, list[Round]]:
    played: dict[int, list[Round]] = {count: [] for count in crews}
    for server in crews.values():
        configs = bodies.line_item(SCALAR, "kl-ucbid"), bodies.line_item(COVARIATE, "linear")
        await planting.create(server, configs)
    with report.progress() as bar:
        task = bar.add_task("Rounds", total=arguments.rounds + 1)
        for _ in range(arguments.rounds + 1):
            for count, server in crews.items():
                calls = await _calls(server, arguments)
                played[count].append(await _round(server, calls))
            bar.advance(task)
    # The first round lets slices grow.
    return {count: rounds[1:] for count, rounds in played.items()}


async def _calls(server: ServerProcess, arguments: argparse.Namespace) -> list[bytes]:
    if arguments.traffic == "single":
        return [bodies.bid(server.key, SCALAR)] * arguments.requests
    turns = max(1, arguments.requests // bodies.MIX_CALLS)
    tickets = await planting.tickets(server, SCALAR, turns * bodies.MIX_TOLD)
    return bodies.mixed(server.key, SCALAR, COVARIATE, tickets)


async def _round(server: ServerProcess, calls: Sequence[bytes]) -> Round:
    pids = pinning.workers(server.child.pid if server.child else 0)
    before_s, own_s = [pinning.processor_s(pid) for pid in pids], time.process_time()
    seen = await planting.loaded(server, lambda load: load.closed_loop(calls), CONNECTIONS)
    own_s = time.process_time() - own_s
    spent_s = [pinning.processor_s(pid) - was for pid, was in zip(pids, before_s, strict=True)]
    return Round(
        rate=seen.rate,
        workers_us=1e6 * sum(spent_s) / len(calls),
        load_us=1e6 * own_s / len(calls),
        busier_share=max(spent_s) / max(sum(spent_s), 1e-9),
        wrong=len(calls) - seen.statuses["200"],
    )
