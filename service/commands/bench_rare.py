"""`bidkeel bench rare`: what each value method earns in money where values come rarely."""

from __future__ import annotations

import argparse
import os

from rich.console import Console

from service.commands import options, report
from service.rehearsal import rare, rare_guesses
from service.rehearsal.rare import CASES, ENTRANTS, ORACLE, Row
from service.rehearsal.rare_guesses import Told

BEHIND_MAX = 6.0  # EUR behind the oracle, for posterior-quantile on 50,000 opportunities.
HELD_IN = (rare.BASKETS.name, rare.SMALL.name)
QUICK_RUNS, RUNS, LONG_RUNS = 20, 100, 10  # The last for more than the usual opportunities.
STARVED = 0.1  # A guess ten times too low earns less than this share of the oracle.
NOTES = (
    "Second price, rivals lognormal (median 3 CPM, sigma 0.8), cap 8 CPM, a new price every 50 "
    "opportunities, values known at once, no budget. What is won counts at its mean value, so "
    "the luck of single conversions is left out; the oracle bids that value, up to the cap.",
    "'no prior': value.expected.conversions 0, where the method allows it. 'asks': the service "
    "refuses such a line item until learning_cost is confirmed. 'refused': not offered at all.",
    f"The default entrants know the typical value and guess half the cap; trees play "
    f"{rare.TREE_RUNS} runs, one at a time.",
)


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=0, help="the first run's seed")
    parser.add_argument("--runs", type=options.count, default=None, help="runs of each method")
    parser.add_argument("--quick", action="store_true", help=f"{QUICK_RUNS} runs")
    parser.add_argument(
        "--opportunities",
        type=options.count,
        default=rare.OPPORTUNITIES,
        help=f"of each run; with more than the default {LONG_RUNS} runs are usual",
    )
    parser.add_argument(
        "--processes", type=options.count, default=os.cpu_count(), help="how many play at once"
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Play every method in every case, then one with wrong guesses, and show it.

    Returns:
        0 when posterior-quantile keeps within 6 EUR of the oracle in the second and fourth
        case and with a typical value wrong by 3, and a guess too low is warned of; 1 when not.
        Only 50,000 opportunities are judged.
    """
    opportunities = arguments.opportunities
    long = opportunities > rare.OPPORTUNITIES
    usual = LONG_RUNS if long else QUICK_RUNS if arguments.quick else RUNS
    runs = arguments.runs or usual
    todo = rare.jobs(list(CASES), list(ENTRANTS), opportunities, runs, arguments.seed)
    with report.progress() as bar:
        task = bar.add_task("Methods in five cases", total=len(todo) + 2)
        found = rare.play_all(todo, arguments.processes, lambda: bar.advance(task))
        told = rare_guesses.by_typical(opportunities, runs, arguments.seed)
        bar.advance(task)
        told.append(rare_guesses.too_low(opportunities, runs, arguments.seed))
        bar.advance(task)
    tables = {case: rare.rows(case, found) for case in CASES}
    judged = opportunities == rare.OPPORTUNITIES
    wrong = [*_too_far(tables), *_badly_told(told)] if judged else []
    _show(opportunities, tables, told, wrong, arguments.json)
    return 1 if wrong else 0


def _too_far(tables: dict[str, list[Row]]) -> list[str]:
    return [
        f"{row.method} is {row.behind:.2f} EUR behind the oracle in {case}."
        for case in HELD_IN
        for row in tables[case]
        if row.method == rare_guesses.METHOD and row.behind > BEHIND_MAX
    ]


def _badly_told(told: list[Told]) -> list[str]:
    *typical, low = told
    far = [f"{one.name}: too far behind." for one in typical if one.behind > BEHIND_MAX]
    if not low.warned or low.share > STARVED:
        far.append("A guess ten times too low neither starves nor is warned of.")
    return far


def _show(
    opportunities: int,
    tables: dict[str, list[Row]],
    told: list[Told],
    wrong: list[str],
    for_a_program: bool,
) -> None:
    console = Console()
    if for_a_program:
        console.print_json(data=_data(opportunities, tables, told, wrong))
        return
    heads = ["surplus (EUR)", "behind the oracle (EUR)", ""]
    for case, rows in tables.items():
        by_name = {row.method: _cells(row) for row in rows}
        shown = {name: by_name.get(name, ["refused", "", ""]) for name in (ORACLE, *ENTRANTS)}
        console.print(report.table(f"{case}, {opportunities:,} opportunities", heads, shown))
    heads = ["surplus (EUR)", "oracle (EUR)", "behind (EUR)", ""]
    title = (
        f"{rare_guesses.METHOD}, {opportunities:,} opportunities, true values from 0.5 to "
        "20 CPM; a guess a tenth of 2 CPM"
    )
    console.print(report.table(title, heads, {one.name: _told_cells(one) for one in told}))
    for line in (*NOTES, *wrong):
        console.print(line, highlight=False)


def _cells(row: Row) -> list[str]:
    behind = "" if row.method == ORACLE else f"{row.behind:.2f} ± {row.behind_error:.2f}"
    return [f"{row.surplus:.2f} ± {row.error:.2f}", behind, "asks" if row.asks else ""]


def _told_cells(one: Told) -> list[str]:
    behind = f"{one.behind:.2f} ± {one.behind_error:.2f}"
    return [f"{one.surplus:.2f}", f"{one.oracle:.2f}", behind, "asks" if one.warned else ""]


def _data(
    opportunities: int, tables: dict[str, list[Row]], told: list[Told], wrong: list[str]
) -> dict[str, object]:
    return {
        "opportunities": opportunities,
        "currency": "EUR",
        "broken": wrong,
        "cases": {
            case: {
                row.method: {
                    "surplus": row.surplus,
                    "behind": row.behind,
                    "behind_error": row.behind_error,
                    "asks": row.asks,
                }
                for row in rows
            }
            for case, rows in tables.items()
        },
        "told": {
            one.name: {"surplus": one.surplus, "oracle": one.oracle, "warned": one.warned}
            for one in told
        },
    }
