"""`bidkeel bench delay`: what late values cost in money, by the way open impressions count."""

from __future__ import annotations

import argparse
import os
from collections.abc import Callable

from rich.console import Console

from service.commands import options, report
from service.rehearsal import late
from service.rehearsal.late import DAYS, FITTED, KNOWN_LAW, ORACLE, WAYS, Job
from service.rehearsal.processes import spread

PER_DAY, RUNS = 50_000, 12
QUICK_PER_DAY, QUICK_RUNS = 50_000 // DAYS, 4
# Asked of corrected counting only; closed windows alone are held to no share.
SHARE_MIN = 0.85
CORRECTED = (KNOWN_LAW, FITTED)
NOTES = (
    "0.1 % x 2 EUR, posterior-quantile with its defaults, second price, rivals lognormal (median "
    "3 CPM, sigma 0.8), cap 8 CPM; 14 days, window 7 days, delays exponential with mean 1.5 days "
    "within the window, a new price every quarter of an hour, through the fold of production.",
    "What is won counts at its mean value. The difference between the oracle and 'values told at "
    "once' is the price of learning; what lies below that is the price of delay.",
)


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=0, help="the first run's seed")
    parser.add_argument("--runs", type=options.count, default=None, help="fortnights of each way")
    parser.add_argument("--per-day", type=options.count, default=None, help="opportunities a day")
    parser.add_argument("--quick", action="store_true", help="50,000 opportunities, four runs")
    parser.add_argument(
        "--processes", type=options.count, default=os.cpu_count(), help="how many play at once"
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Play every way of counting on the same fortnights and show it.

    Returns:
        0 when corrected counting earns at least 85 % of the oracle, 1 when not; with `--quick`
        0 when it earns more than closed windows alone, as so few impressions teach too little.
    """
    per_day = arguments.per_day or (QUICK_PER_DAY if arguments.quick else PER_DAY)
    runs = arguments.runs or (QUICK_RUNS if arguments.quick else RUNS)
    seeds = range(arguments.seed, arguments.seed + runs)
    # The slowest first, so that no process plays on alone at the end.
    todo = [Job(way, DAYS * per_day, seed) for way in reversed(WAYS) for seed in seeds]
    with report.progress() as bar:
        task = bar.add_task("Fortnights", total=len(todo))
        earned = play_all(todo, arguments.processes, lambda: bar.advance(task))
    _show(earned, DAYS * per_day, arguments.json)
    shares = [_share(earned, way) for way in CORRECTED]
    least = _share(earned, late.MATURED) if arguments.quick else SHARE_MIN
    return 0 if min(shares) >= least else 1


def play_all(
    todo: list[Job], processes: int, advance: Callable[[], object]
) -> dict[str, list[int]]:
    """The surplus of each way on each fortnight, in nanos, in the order of the seeds."""
    # Processes end in any order, and ways are compared fortnight by fortnight.
    earned: dict[str, dict[int, int]] = {way: {} for way in WAYS}
    for job, surplus in spread(late.played, todo, processes):
        earned[job.way][job.seed] = surplus
        advance()
    return {way: [by_seed[seed] for seed in sorted(by_seed)] for way, by_seed in earned.items()}


def _share(earned: dict[str, list[int]], way: str) -> float:
    return sum(earned[way]) / sum(earned[ORACLE])


def _show(earned: dict[str, list[int]], opportunities: int, for_a_program: bool) -> None:
    console = Console()
    if for_a_program:
        figures = {
            way: {"surplus": mean, "error": error, "share": _share(earned, way)}
            for way in WAYS
            for mean, error in [late.units(earned[way])]
        }
        data = {"opportunities": opportunities, "currency": "EUR", "ways": figures}
        console.print_json(data=data)
        return
    rows = {way: _cells(earned, way) for way in WAYS}
    title = f"Late values, {opportunities:,} opportunities in {DAYS} days"
    console.print(report.table(title, ["surplus (EUR)", "of the oracle"], rows))
    for line in NOTES:
        console.print(line, highlight=False)


def _cells(earned: dict[str, list[int]], way: str) -> list[str]:
    mean, error = late.units(earned[way])
    return [f"{mean:.2f} ± {error:.2f}", f"{100.0 * _share(earned, way):.1f} %"]
