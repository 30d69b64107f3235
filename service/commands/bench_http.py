"""`bidkeel bench http`: the service against bare endpoints under one load, as ratios."""

from __future__ import annotations

import argparse
import asyncio
import itertools
import json
import statistics
import sys
import tempfile
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from functools import partial
from pathlib import Path

from rich.console import Console

from service.commands import bodies, duel, options, report
from service.commands.duel import Contest, Pair
from service.commands.postgresql_process import PostgreSQLProcess

SCALAR, COVARIATE = "bench-scalar", "bench-linear"
SINGLE, LINEAR, BATCH, OUTCOMES = "bids, kl-ucbid", "bids, linear", "batches", "outcomes"
HALF = "bids at half load"
# Ours over the bare one's rate; for the one at an even rate the bare p99 over ours.
TARGETS = {SINGLE: 0.90, LINEAR: 0.75, BATCH: 0.50, OUTCOMES: 0.35}
WAIT_RATIO_MAX = 1.5


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--rounds", type=options.count, default=7, help="of each side, by turns")
    parser.add_argument("--requests", type=options.count, default=8000, help="single bids a round")
    kinds = ("sqlite", "postgresql")
    parser.add_argument("--database", choices=kinds, default="sqlite", help="that the bids use")
    parser.add_argument("--workers", type=options.count, default=1, help="processes that serve")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Put the same load on both sides by turns and show ratios with their spread.

    Returns:
        0 when every answer was right, whatever the ratios; 3 when one was not.
    """
    with tempfile.TemporaryDirectory() as folder, _settings(arguments) as settings:
        contests = asyncio.run(_contests(Path(folder), settings, arguments))
    if arguments.json:
        sys.stdout.write(json.dumps([duel.as_json(contest) for contest in contests]) + "\n")
    else:
        _show(contests, arguments)
    return 3 if any(side.wrong for contest in contests for side in contest.ours) else 0


@contextmanager
def _settings(arguments: argparse.Namespace) -> Iterator[dict[str, str]]:
    patience = {"BIDKEEL_DEADLINE_MS_MAX": str(bodies.PATIENT_MS)}
    settings = {"BIDKEEL_WORKERS": str(arguments.workers), **patience}
    if arguments.database == "sqlite":
        yield settings
        return
    with PostgreSQLProcess() as database:
        yield {**settings, "BIDKEEL_DATABASE_URL": database.url}


async def _contests(
    folder: Path, settings: dict[str, str], arguments: argparse.Namespace
) -> list[Contest]:
    async with Pair(folder, settings) as pair:
        await pair.create(bodies.line_item(SCALAR, "kl-ucbid"))
        await pair.create(bodies.line_item(COVARIATE, "linear"))
        with report.progress() as bar:
            task = bar.add_task("Rounds", total=5 * (arguments.rounds + 1))
            return await _played(pair, arguments, lambda: bar.advance(task))


async def _played(
    pair: Pair, arguments: argparse.Namespace, on_round: Callable[[], None]
) -> list[Contest]:
    key, requests = pair.server.key, arguments.requests
    calls = {
        SINGLE: (bodies.bid(key, SCALAR), requests, 1),
        LINEAR: (bodies.bid(key, COVARIATE, features=bodies.FEATURES), requests, 1),
        BATCH: (bodies.batch(key, SCALAR), max(requests // 20, 1), bodies.BATCH_ROWS),
    }
    contests = []
    for name, (call, count, rows) in calls.items():
        contest = Contest(name, rows)
        await _rounds(pair, contest, partial(itertools.repeat, call, count), arguments, on_round)
        contests.append(contest)
    single = statistics.median(side.rate for side in contests[0].ours)
    half = Contest(HALF)
    steady = calls[SINGLE][0]
    await _rounds(
        *(pair, half, lambda: itertools.repeat(steady, requests), arguments, on_round), single / 2
    )
    told = Contest(OUTCOMES, bodies.BATCH_ROWS)
    await _outcomes(pair, told, arguments, on_round)
    return [*contests, half, told]


async def _rounds(
    pair: Pair,
    contest: Contest,
    requests: Callable[[], Iterable[bytes]],
    arguments: argparse.Namespace,
    on_round: Callable[[], None],
    rate: float | None = None,
) -> None:
    # The first round warms both sides and lets slices grow; it does not count.
    await pair.round(Contest("warm"), requests, rate)
    on_round()
    for _ in range(arguments.rounds):
        await pair.round(contest, requests, rate)
        on_round()


async def _outcomes(
    pair: Pair, contest: Contest, arguments: argparse.Namespace, on_round: Callable[[], None]
) -> None:
    """Rounds of outcomes, each of tickets that were never told of before."""
    count = max(arguments.requests // 40, 1)
    for number in range(arguments.rounds + 1):
        tickets = await pair.tickets(SCALAR, count * bodies.BATCH_ROWS)
        calls = [
            bodies.outcomes(pair.server.key, tickets[at : at + bodies.BATCH_ROWS])
            for at in range(0, len(tickets), bodies.BATCH_ROWS)
        ]
        await pair.round(contest if number else Contest("warm"), partial(iter, calls))
        on_round()


def _show(contests: Sequence[Contest], arguments: argparse.Namespace) -> None:
    rows = {
        f"{contest.name}, {contest.rows} a request": (
            f"{contest.ratio:.2f}",
            duel.spread(contest.ratios),
            f"{TARGETS[contest.name]:.2f}" if contest.name in TARGETS else "",
            f"{contest.rows_rate:,.0f}",
            f"{_median(contest, 'processor_us', 'bare'):,.0f}",
            f"{_median(contest, 'processor_us', 'ours'):,.0f}",
            f"{_waits(contest, 'bare')}",
            f"{_waits(contest, 'ours')}",
            f"{sum(side.marked for side in contest.ours):,}",
        )
        for contest in contests
    }
    heads = ["ratio", "from, to", "aim", "rows a second", "bare us", "ours us"]
    heads += ["bare p50, p99 ms", "ours p50, p99 ms", "passes"]
    title = (
        f"{arguments.database}, {arguments.workers} at work, {duel.CONNECTIONS} connections, "
        f"{arguments.rounds} rounds by turns; us: processor time for a request"
    )
    console = Console(width=150)
    console.print(report.table(title, heads, rows))
    half = next(contest for contest in contests if contest.name == HALF)
    pairs = zip(half.ours, half.bare, strict=True)
    longer = [our.wait_ms_99 / bare.wait_ms_99 for our, bare in pairs]
    console.print(
        f"p99 at half load is {statistics.median(longer):.2f} times the bare one's "
        f"({duel.spread(longer)}); the aim is at most {WAIT_RATIO_MAX}."
    )


def _median(contest: Contest, member: str, side: str) -> float:
    found: list[float] = [getattr(one, member) for one in getattr(contest, side)]
    return statistics.median(found)


def _waits(contest: Contest, side: str) -> str:
    return (
        f"{_median(contest, 'wait_ms_half', side):.2f}, {_median(contest, 'wait_ms_99', side):.2f}"
    )
