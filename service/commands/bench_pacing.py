"""`bidkeel bench pacing`: budgets, return targets and hints on invented markets, as tables.

Apart from the measuring, which the tests share. Everything is drawn from the seed, and every
share says of what: the hindsight programme knows all that was to come.
"""

from __future__ import annotations

import argparse
from collections.abc import Mapping
from functools import partial

from rich.console import Console

from service.commands import options, report
from service.rehearsal import pacing_figures as figures
from service.rehearsal.market import Draws, LognormalBids, UniformBids
from service.rehearsal.pacing_figures import Budget, Hinted, Target

ROUNDS = (10_000, 100_000)
METHODS = ("ucbid", "kl-ucbid", "bayes-ucb")
BUDGETS = (0.05, 0.1)
MEAN = 10**6
HINT_RIVALS: dict[str, Draws] = {
    "prices around the mean": LognormalBids(MEAN, 0.5),
    "prices from nothing up": UniformBids(0, 2 * MEAN),
}

Row = Mapping[str, float]


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=7, help="of every invented market")
    parser.add_argument("--quick", action="store_true", help="fewer rounds, days and budgets")
    parser.add_argument("--json", action="store_true", help="print figures a program can read")


def run(arguments: argparse.Namespace) -> int:
    """Measure and print; 0, as there is nothing here to refuse."""
    steps = {
        "budget": partial(_budgets, arguments.seed, _sizes(arguments.quick)),
        "return_target": partial(_returns, arguments.seed, _sizes(arguments.quick)),
        "hours": partial(_hours, arguments.seed, 1 if arguments.quick else 3),
        "hints": partial(_hints, arguments.seed, BUDGETS[:1] if arguments.quick else BUDGETS),
    }
    found = dict[str, dict[str, Row]]()
    with report.progress() as bar:
        task = bar.add_task("Pacing on invented markets", total=len(steps))
        for name, measure in steps.items():
            found[name] = measure()
            bar.advance(task)
    show(found, arguments.json)
    return 0


TITLES = {
    "budget": "Budget: surplus as a share of the hindsight linear programme's",
    "return_target": "Return target 1: value as a share of the static oracle's",
    "hours": "Hourly spend, from the second hour after traffic doubles and halves",
    "hints": "Hints: surplus over that of one learnt value",
}


def _sizes(quick: bool) -> tuple[int, ...]:
    return ROUNDS[:1] if quick else ROUNDS


def _budgets(seed: int, sizes: tuple[int, ...]) -> dict[str, Row]:
    rows: dict[str, Row] = {}
    for rounds in sizes:
        of = f"{rounds:,} rounds"
        rows[f"each value known, {of}"] = _budget(figures.known_values(rounds, seed))
        far = figures.known_values(rounds, seed, guess=8.0)
        rows[f"the same, forecast 8 times too high, {of}"] = _budget(far)
        rows[f"one value, known, {of}"] = _budget(figures.one_value(rounds, seed, None))
        for method in METHODS:
            one = figures.one_value(rounds, seed, method)
            rows[f"one value, learnt by {method}, {of}"] = _budget(one)
    return rows


def _returns(seed: int, sizes: tuple[int, ...]) -> dict[str, Row]:
    rows: dict[str, Row] = {}
    for rounds in sizes:
        for strict in (False, True):
            for budget, words in ((None, ""), (0.5, ", half the budget")):
                name = f"{'strict' if strict else 'on average'}{words}, {rounds:,} rounds"
                rows[name] = _return(figures.return_on_spend(rounds, seed, strict, budget))
    return rows


def _hours(seed: int, days: int) -> dict[str, Row]:
    rows: dict[str, Row] = {}
    for name, rivals in figures.RIVALS.items():
        for like in (True, False):
            seen = [
                figures.hours(rivals, factor, like, seed + day)
                for factor in (2.0, 0.5)
                for day in range(days)
            ]
            share, count = figures.within_share(seen)
            spent = sum(hour.spent for day in seen for hour in day)
            planned = sum(hour.planned for day in seen for hour in day)
            traffic = "like the profile" if like else "even"
            rows[f"{name} prices, traffic {traffic}"] = {
                "hours within 10 %": share,
                "hours": count,
                "budget spent": spent / planned,
            }
    return rows


def _hints(seed: int, budgets: tuple[float, ...]) -> dict[str, Row]:
    return {
        f"{name}, money for {budget:.0%}": _hint(figures.by_hints(rivals, budget, seed))
        for name, rivals in HINT_RIVALS.items()
        for budget in budgets
    }


def _budget(one: Budget) -> Row:
    return {"of the programme": one.earned, "budget spent": one.spent}


def _return(one: Target) -> Row:
    return {
        "of the oracle": one.valued,
        "lowest slack, of its spend": one.least,
        "slack at the end": one.end,
    }


def _hint(one: Hinted) -> Row:
    return {
        "times": one.times,
        "spent, hints": one.spent_hints,
        "spent, one": one.spent_one,
    }


def show(found: Mapping[str, Mapping[str, Row]], for_a_program: bool) -> None:
    """Print what was found, as one object or as a table of each kind."""
    console = Console()
    if for_a_program:
        console.print_json(data=found)
        return
    for name, rows in found.items():
        heads = list(next(iter(rows.values())))
        cells = {row: [_cell(head, row_of[head]) for head in heads] for row, row_of in rows.items()}
        console.print(report.table(TITLES[name], heads, cells))


def _cell(head: str, number: float) -> str:
    if head == "hours":
        return f"{number:,.0f}"
    return f"{number:.2f}" if head == "times" else f"{100 * number:.2f} %"
