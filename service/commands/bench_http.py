"""`bidkeel bench http`: the service against bare endpoints under one load, as ratios."""

from __future__ import annotations

import argparse
import statistics
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path

from rich.console import Console

from service.commands import bodies, contests, duel, figures, load, options, report
from service.commands.contests import KINDS, Kind
from service.commands.duel import Contest, Pair
from service.commands.figures import Figure
from service.commands.postgresql_process import PostgreSQLProcess

Played = Mapping[str, Contest]
_SHARES = ("half", "99")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument(
        "--only",
        nargs="+",
        choices=KINDS,
        default=list(KINDS),
        metavar="NAME",
        help=f"kinds of traffic to play instead of all: {', '.join(KINDS)}",
    )
    parser.add_argument("--rounds", type=options.count, default=7, help="of each side, by turns")
    parser.add_argument("--requests", type=options.count, default=3000, help="single bids a round")
    options.add_database(parser)
    parser.add_argument("--workers", type=options.count, default=1, help="processes of each side")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Put the same load on both sides by turns and show ratios with their spread.

    Returns:
        0 when every answer was right, whatever the ratios; 3 when one was not.
    """
    with tempfile.TemporaryDirectory() as folder, _settings(arguments.database) as settings:
        played = load.run(_played(Path(folder), settings, arguments))
    if arguments.json:
        figures.write(one for name in played for one in _figures(KINDS[name], played[name]))
    else:
        _show(played, arguments)
    sides = [side for contest in played.values() for side in contest.bare + contest.ours]
    return 3 if any(side.wrong for side in sides) else 0


@contextmanager
def _settings(database: str) -> Iterator[dict[str, str]]:
    patience = {"BIDKEEL_DEADLINE_MS_MAX": str(bodies.PATIENT_MS)}
    if database == "sqlite":
        yield patience
        return
    with PostgreSQLProcess() as server:
        yield {**patience, "BIDKEEL_DATABASE_URL": server.url}


async def _played(folder: Path, settings: dict[str, str], arguments: argparse.Namespace) -> Played:
    rounds, requests = arguments.rounds, arguments.requests
    found = dict[str, Contest]()
    async with Pair(folder, settings, arguments.workers) as pair:
        await contests.prepare(pair)
        with report.progress() as bar:
            task = bar.add_task("Rounds", total=len(arguments.only) * (rounds + 1))
            for name in dict.fromkeys(arguments.only):
                found[name] = await contests.play(
                    pair, KINDS[name], rounds, requests, lambda: bar.advance(task)
                )
    return found


def _figures(kind: Kind, contest: Contest) -> list[Figure]:
    """The one with the aim first."""
    half, last = ([getattr(side, f"wait_ms_{share}") for side in contest.ours] for share in _SHARES)
    rate = [side.rate * contest.rows for side in contest.ours]
    spent = {
        "us of the bare endpoint": [side.processor_us for side in contest.bare],
        "us of the workers": [side.processor_us for side in contest.ours],
        "us of all processes of the service": [side.whole_us for side in contest.ours],
    }
    named = f"{contest.name}, "
    return [
        _judged(kind, contest),
        figures.of_rounds(f"{named}p50", "ms", half),
        figures.of_rounds(f"{named}p99", "ms", last),
        figures.of_rounds(f"{named}bids and outcomes", "a second", rate),
        *(
            figures.of_rounds(f"{named}processor time of a request", unit, took)
            for unit, took in spent.items()
        ),
    ]


def _judged(kind: Kind, contest: Contest) -> Figure:
    if kind.even:
        name = f"{contest.name}, p99 over the bare one's"
        return figures.of_rounds(name, "times", contest.wait_ratios, kind.aim)
    name = f"{contest.name}, rate over the bare one's"
    return figures.of_rounds(name, "times", contest.ratios, kind.aim, at_least=True)


def _show(played: Played, arguments: argparse.Namespace) -> None:
    title = (
        f"{arguments.database}, {arguments.workers} at work, {duel.CONNECTIONS} connections, "
        f"{arguments.rounds} rounds by turns"
    )
    heads = ["ratio", "from, to", "aim", "rows a second", "passes"]
    rows = {
        f"{contest.name}, {contest.rows:g} a request": _cells(KINDS[name], contest)
        for name, contest in played.items()
    }
    console = Console(width=figures.WIDTH)
    console.print(report.table(title, heads, rows))
    heads = ["bare us", "ours us", "with clerk us"]
    heads += ["bare p50 ms", "ours p50 ms", "bare p99 ms", "ours p99 ms"]
    costs = {contest.name: _costs(contest) for contest in played.values()}
    console.print(report.table("Medians; us: processor time for a request", heads, costs))
    console.print(
        "Ratio: our rate over the bare one's; at half load our p99 over the bare one's. In mixed "
        "traffic 17 of 20 requests are single bids, two batches of 20, and one tells of 20 bids.",
        highlight=False,
    )


def _cells(kind: Kind, contest: Contest) -> tuple[str, ...]:
    judged = _judged(kind, contest)
    ends = judged.spread or (judged.figure, judged.figure)
    return (
        f"{judged.figure:.2f}",
        duel.spread(ends),
        "" if kind.aim is None else f"at {'most' if kind.even else 'least'} {kind.aim:g}",
        f"{contest.rows_rate:,.0f}",
        f"{sum(side.marked for side in contest.ours):,}",
    )


def _costs(contest: Contest) -> list[str]:
    spent = (("processor_us", "bare"), ("processor_us", "ours"), ("whole_us", "ours"))
    waits = [(f"wait_ms_{share}", side) for share in _SHARES for side in ("bare", "ours")]
    return [
        *(f"{_median(contest, member, side):,.0f}" for member, side in spent),
        *(f"{_median(contest, member, side):.2f}" for member, side in waits),
    ]


def _median(contest: Contest, member: str, side: str) -> float:
    found: list[float] = [getattr(one, member) for one in getattr(contest, side)]
    return statistics.median(found)
