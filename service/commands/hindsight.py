"""`bidkeel hindsight`: what another cap, price, floor or method would have done, as a table."""

from __future__ import annotations

import argparse
import asyncio
import json
from collections.abc import Mapping
from contextlib import ExitStack
from typing import Any

from rich.console import Console

from service import money
from service.api import answers
from service.api.forms.hindsights import HindsightForm
from service.api.forms.reading import read
from service.commands import report
from service.connecting import open_database
from service.hindsights import Hindsights, Question, Seen
from service.ordering import Orders
from service.settings import load
from service.store.migrate import require_current
from service.threads import Threads


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Which line item, which alternative, which span, and the form of the answer."""
    parser.add_argument("line_item", help="the line item whose log is read")
    other = parser.add_mutually_exclusive_group(required=True)
    other.add_argument("--cap", dest="bid_cap_cpm", help="another bid cap, as CPM with fees")
    other.add_argument("--flat", dest="flat_price_cpm", help="one price for all, as CPM with fees")
    other.add_argument("--floor", dest="floor_cpm", help="every seller's floor, as CPM with fees")
    other.add_argument("--method", help="another method, by its name")
    parser.add_argument("--from", dest="from_at", help="a time such as 2026-12-01T09:00:00Z")
    parser.add_argument("--until", dest="until_at", help="a time; what comes before it is read")
    parser.add_argument("--json", action="store_true", help="one JSON object, no table")


def run(arguments: argparse.Namespace) -> int:
    """Exit code 0 when the log could be read, whatever it says."""
    names = HindsightForm.model_fields
    # The form of the API judges them, so both refuse in the same words.
    given = {name: getattr(arguments, name) for name in names}
    form = read(HindsightForm, {name: one for name, one in given.items() if one is not None})
    with ExitStack() as stack:
        bar = None if arguments.json else stack.enter_context(report.progress())
        task = None if bar is None else bar.add_task("Lines of the log", total=None)

        def seen(lines: int) -> None:
            if bar is not None and task is not None:
                bar.update(task, completed=lines)

        found = asyncio.run(_look(arguments.line_item, form.question, seen))
    if arguments.json:
        Console().print_json(json.dumps(answers.plain(found)))
    else:
        _show(found)
    return 0


async def _look(line_item: str, question: Question, seen: Seen) -> dict[str, Any]:
    database, threads = open_database(load()), Threads(1)
    try:
        require_current(database)
        looked = Hindsights(Orders(database, threads, asyncio.Event()))
        return await looked.look(line_item, question, seen)
    finally:
        threads.close()
        database.close()


def _show(found: Mapping[str, Any]) -> None:
    console, currency = Console(), str(found["currency"])
    sure = found["without_model"]
    heads = [f"surplus from, {currency}", "to", "auctions", "known for certain"]
    rows = {
        "as it was": _row(found["as_it_was"]),
        "without a model": _row(sure),
        **{line["label"]: _assumed(line) for line in found["assumed"]},
    }
    title = f"{found['line_item']}: {found['alternative_says']}"
    console.print(report.table(title, heads, rows))
    drawn = {line["label"]: _drawn(line) for line in found["drawn"]}
    heads = ["surplus per auction, CPM", "from", "to", "effective auctions"]
    console.print(report.table("By the chances bids were drawn with", heads, drawn))
    log = ", ".join(f"{count:,} {name.replace('_', ' ')}" for name, count in found["log"].items())
    for line in _words(found, log):
        console.print(line, highlight=False)


def _words(found: Mapping[str, Any], log: str) -> list[str]:
    lines = [*found["assumed"], *found["drawn"]]
    said = [f"{line['label']}: {line.get('assumes') or line['says']}." for line in lines]
    cut = ["The log was cut at its limit of lines."] if found["log_is_cut"] else []
    return [
        f"Without a model: {found['without_model']['says']}.",
        # Lines often share an assumption; each is said once, in order.
        *dict.fromkeys(said),
        f"Budget: {found['budget']['says']}.",
        f"Log: {log}. Left out: {found['left_out']}.",
        *cut,
    ]


def _row(shown: Mapping[str, Any]) -> list[str]:
    ends, exact = shown["surplus"], shown["exact"]
    return [
        money.nanos_text(ends["low_nanos"]),
        money.nanos_text(ends["high_nanos"]),
        f"{shown['auctions']:,}",
        report.share(exact["auctions"], shown["auctions"]),
    ]


def _assumed(line: Mapping[str, Any]) -> list[str]:
    if "code" in line:
        return [f"refused: {line['code']}", "", "", ""]
    ends = line["surplus"]
    level = "a rough guide" if line["level"] is None else f"{100 * line['level']:.0f} %, assumed"
    auctions = f"{line['auctions']:,}"
    return [*(money.nanos_text(end) for end in ends.values()), auctions, level]


def _drawn(line: Mapping[str, Any]) -> list[str]:
    if "code" in line:
        return [f"refused: {line['code']}", "", "", f"{line.get('effective_auctions', 0.0):,.1f}"]
    ends = line["surplus_per_auction"].values()
    return [*(report.cpm(end) for end in ends), f"{line['effective_auctions']:,.1f}"]
