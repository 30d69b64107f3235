"""`bidkeel bench regret`: what each method loses on each invented market, beside its theory."""

from __future__ import annotations

import argparse
import math
import os

from rich.console import Console

from service.commands import options, report
from service.rehearsal import contest, theory, tree_contest, worlds
from service.rehearsal.regret_table import FULL, METHODS, QUICK, Table, jobs, table

NOTES = (
    "Benchmark: the best fixed bid, known beforehand; after an abrupt change the best of each "
    "half, under drift the best of each round. Regret is in scales (cap = ceiling = 1) and counts "
    "an impression at its mean value given its price, so luck with values is left out.",
    "Feedback: price and value of a win; of a loss only that it is one, but for exptree, which is "
    "told the competing bid. Values are known before the next bid, but in `delayed`.",
    f"'T known' is as published, its law renewed every round on {worlds.STAGES[worlds.IID].cells} "
    "ticks (40 and 10,000 in the coin flips); the win-only variant and its bound are our own. "
    f"Without these words it is as the service runs it: doubling, one law for {tree_contest.EPOCH} "
    "bids, for which no theorem speaks.",
    f"Forgetting is tuned for {contest.CHANGES} change in T rounds. Theory's growth is an upper "
    "bound, but a lower one for the greedy mean and for exp3 on coin flips; logarithms show only "
    "on longer runs, so a fit above an asymptotic growth breaks no bound. 'order only': "
    "published without its constants. * lost least at the longest horizon; (b) is a baseline.",
)


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=7, help="chooses every draw")
    parser.add_argument("--quick", action="store_true", help="short horizons and few runs")
    parser.add_argument(
        "--processes", type=options.count, default=os.cpu_count(), help="how many play at once"
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Play everything and show it.

    Returns:
        0 when every method keeps its bound where its assumptions hold, trees beat the grid on
        coin flips and forgetting helps after a change; 1 when not.
    """
    size = QUICK if arguments.quick else FULL
    todo = jobs(size, arguments.seed)
    with report.progress() as bar:
        task = bar.add_task("Methods and trees at each horizon", total=len(todo))
        found = table(size, todo, arguments.processes, lambda: bar.advance(task))
    _show(found, arguments.json)
    return 1 if found.broken() else 0


def _show(found: Table, for_a_program: bool) -> None:
    console = Console()
    if for_a_program:
        console.print_json(data=_data(found))
        return
    heads = [*(f"T = {rounds:,}" for rounds in found.size.horizons), "grows", "theory", "", "bound"]
    for market in found.markets():
        rows = {_named(found, market, name): _row(found, market, name) for name in METHODS}
        title = f"{market}: {worlds.STAGES[market].says} (regret ± s.e.)"
        console.print(report.table(title, heads, rows))
    for line in (*NOTES, *(found.broken() or ["Everything that must hold does."])):
        console.print(line, highlight=False)


def _named(found: Table, market: str, method: str) -> str:
    baseline = " (b)" if method in contest.BASELINES else ""
    return f"{method}{baseline}{' *' if method == found.winner(market) else ''}"


def _row(found: Table, market: str, method: str) -> list[str]:
    cells = [found.cells[market, method, rounds] for rounds in found.size.horizons]
    published = theory.growth(method, market)
    beside = found.theory_exponent(market, method)
    most = theory.bound(method, market, found.size.horizons[-1])
    return [
        *(f"{cell.mean:.1f} ± {cell.error:.1f}" for cell in cells),
        _exponent(found.exponent(market, method)),
        "-" if beside is None else _exponent(beside),
        "" if published is None else published.words,
        most if isinstance(most, str) else f"{most:.0f}",
    ]


def _exponent(value: float) -> str:
    return "-" if math.isnan(value) else f"{value:.2f}"


def _data(found: Table) -> dict[str, object]:
    return {
        "horizons": list(found.size.horizons),
        "broken": found.broken(),
        "markets": {
            market: {
                "says": worlds.STAGES[market].says,
                "winner": found.winner(market),
                "methods": {name: _figures(found, market, name) for name in found.methods(market)},
            }
            for market in found.markets()
        },
    }


def _figures(found: Table, market: str, method: str) -> dict[str, object]:
    horizons = found.size.horizons
    exponent = found.exponent(market, method)
    return {
        "regret": found.means(market, method),
        "error": [found.cells[market, method, rounds].error for rounds in horizons],
        "exponent": None if math.isnan(exponent) else exponent,
        "theory_exponent": found.theory_exponent(market, method),
        "bounds": [theory.bound(method, market, rounds) for rounds in horizons],
    }
