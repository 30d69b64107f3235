"""`bidkeel demo`: an invented advertiser against a real server, apart from what it invents.

Market and values come from one seed. When an outcome reaches the learner depends on the
machine, so two runs bid almost, but not exactly, alike.
"""

from __future__ import annotations

import argparse
import signal
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import uvloop
from rich.console import Console
from rich.table import Table

from service import money
from service.commands import caller, garden, options, report
from service.commands.exchange import Auction, Book, Exchange
from service.commands.server_process import ServerProcess
from service.rehearsal.hindsight import FixedBid, best_fixed_bid


@dataclass(frozen=True, slots=True)
class Figures:
    """What the table shows of one line item: its plan, both sides' books, and hindsight."""

    planned: garden.Planned
    book: Book
    learnt: caller.Learnt
    best: FixedBid

    @property
    def kept(self) -> bool:
        """Whether the budget held and both sides count the same money."""
        return self.book.charged == self.learnt.spent <= self.learnt.budget


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--auctions", type=options.count, default=24_000, help="how many")
    parser.add_argument("--seed", type=options.seed, default=7, help="of the invented market")
    parser.add_argument("--json", action="store_true", help="print figures for a program")
    parser.add_argument(
        "--keep-serving", action="store_true", help="leave the server running until Ctrl-C"
    )


def run(arguments: argparse.Namespace) -> int:
    """
    Run the demo.

    Returns:
        0 when every budget held and both sides' books agree to the nano, else 1.
    """
    # Told to end, end like on Ctrl-C, so that no server outlives the demo.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    with tempfile.TemporaryDirectory(prefix="bidkeel-demo-") as directory:
        with ServerProcess(Path(directory)) as server:
            _say_where(server)
            started = time.monotonic()
            figures = _played(server, arguments.auctions, arguments.seed)
            _show(figures, time.monotonic() - started, arguments.json)
            if arguments.keep_serving:
                _keep_serving(server)
            else:
                _say_how_to_keep()
    return 0 if all(of_one.kept for of_one in figures) else 1


def _played(server: ServerProcess, count: int, seed: int) -> list[Figures]:
    with report.progress() as bar:
        task = bar.add_task("Auctions over HTTP", total=count)
        return uvloop.run(play(server, count, seed, lambda number: bar.advance(task, number)))


async def play(
    server: ServerProcess, count: int, seed: int, advance: Callable[[int], None]
) -> list[Figures]:
    """
    Make the line items, play the auctions and wait until everything is taught.

    Args:
        server: Running, with an admin key.
        count: How many auctions.
        seed: Of the invented market.
        advance: Called with the number of auctions just played.
    """
    planned = garden.line_items()
    auctions = garden.market(planned, count, seed)
    async with server.wire() as wire:
        for item in planned:
            await caller.create(wire, item.body)
        exchange = Exchange(wire)
        await exchange.play(auctions, advance)
        figures = []
        for item in planned:
            book = exchange.books.setdefault(item.id, Book())
            learnt = await caller.learnt(wire, item.id, book.wins)
            figures.append(Figures(item, book, learnt, _hindsight(auctions, item.id, learnt)))
        return figures


def _hindsight(auctions: list[Auction], line_item: str, learnt: caller.Learnt) -> FixedBid:
    mine = [auction for auction in auctions if auction.line_item == line_item]
    rivals = [auction.rival for auction in mine]
    values = [auction.value or 0 for auction in mine]
    return best_fixed_bid(rivals, values, budget=learnt.budget)


def _show(figures: list[Figures], seconds: float, for_a_program: bool) -> None:
    console = Console()
    if for_a_program:
        console.print_json(data=_data(figures, seconds))
        return
    console.print(table(figures))
    count = sum(of_one.book.auctions for of_one in figures)
    console.print(
        f"{count:,} auctions over HTTP in {seconds:.1f} s ({count / seconds:.0f} a second)."
    )
    for of_one in figures:
        console.print(_books_line(of_one), highlight=False)
    console.print(
        "Hindsight knows every price and value of this very run, so nobody can bid like it; "
        "with one value in a thousand impressions, surplus is mostly luck over so few.",
        style="dim",
    )


def table(figures: list[Figures]) -> Table:
    """The demo's table: one column per line item, the unit in the name of every row."""
    rows = {name: [write(of_one) for of_one in figures] for name, write in _ROWS.items()}
    title = "Firnholz Alpine Garden, invented (CPM in EUR per 1,000 impressions)"
    return report.table(title, [of_one.planned.id for of_one in figures], rows)


def _mean_price(of_one: Figures) -> str:
    book = of_one.book
    return report.cpm(book.charged / book.wins) if book.wins else "-"


_ROWS: dict[str, Callable[[Figures], str]] = {
    "method": lambda f: f.planned.method,
    "spent (EUR)": lambda f: money.nanos_text(f.learnt.spent),
    "budget (EUR)": lambda f: money.nanos_text(f.learnt.budget),
    "auctions (count)": lambda f: f"{f.book.auctions:,}",
    "passes (count)": lambda f: f"{f.book.passes.total():,}",
    "wins (count)": lambda f: f"{f.book.wins:,}",
    "win rate (per auction)": lambda f: report.share(f.book.wins, f.book.auctions),
    "mean price (CPM)": _mean_price,
    "estimated value (CPM)": lambda f: report.cpm(f.learnt.mean),
    "its interval (CPM)": lambda f: report.interval(f.learnt.low, f.learnt.high),
    "true value (CPM)": lambda f: report.cpm(f.planned.mean * money.NANOS_PER_UNIT),
    "surplus, won - paid (EUR)": lambda f: money.nanos_text(f.book.surplus),
    "best fixed bid had (EUR)": lambda f: money.nanos_text(f.best.surplus),
    "that bid, hindsight (CPM)": lambda f: report.cpm(f.best.bid),
}


def _books_line(of_one: Figures) -> str:
    charged, spent = of_one.book.charged, of_one.learnt.spent
    return (
        f"{of_one.planned.id}: exchange charged {report.amount(charged, garden.CURRENCY)} "
        f"{'=' if charged == spent else 'BUT'} spent {report.amount(spent, garden.CURRENCY)}\n"
        f"    passes: {report.reasons(of_one.book.passes)}"
    )


def _data(figures: list[Figures], seconds: float) -> dict[str, object]:
    return {"seconds": round(seconds, 3), "line_items": [_data_of(of_one) for of_one in figures]}


def _data_of(of_one: Figures) -> dict[str, object]:
    book, learnt = of_one.book, of_one.learnt
    return {
        "line_item": of_one.planned.id,
        "method": of_one.planned.method,
        "currency": garden.CURRENCY,
        "budget": money.nanos_text(learnt.budget),
        "spent": money.nanos_text(learnt.spent),
        "charged": money.nanos_text(book.charged),
        "auctions": book.auctions,
        "passes": dict(book.passes),
        "wins": book.wins,
        "value_cpm": money.cpm_number(learnt.mean),
        "value_low_cpm": money.cpm_number(learnt.low),
        "value_high_cpm": money.cpm_number(learnt.high),
        "value_true_cpm": of_one.planned.mean * 1000,
        "surplus": money.nanos_text(book.surplus),
        "hindsight_surplus": money.nanos_text(of_one.best.surplus),
        "hindsight_bid_cpm": money.cpm_number(of_one.best.bid),
    }


def _say_where(server: ServerProcess) -> None:
    """Where people can watch while it plays; on the error output, as the progress is."""
    console = Console(stderr=True, soft_wrap=True)
    console.print(f"Watch page, while the demo runs: {server.address}/watch", highlight=False)
    console.print(f"Sign in with the key {server.key}", highlight=False)


def _say_how_to_keep() -> None:
    Console(stderr=True).print(
        "The demo's server and its watch page have ended. `bidkeel demo --keep-serving` leaves "
        "them running; `bidkeel serve` starts a server of your own.",
        style="dim",
    )


def _keep_serving(server: ServerProcess) -> None:
    console = Console(stderr=True, soft_wrap=True)
    console.print(f"Watch page at {server.address}/watch, key {server.key}", highlight=False)
    console.print(f"Interactive API page at {server.address}/docs", highlight=False)
    console.print("Ctrl-C ends the server and deletes its data.")
    try:
        server.wait()
    except KeyboardInterrupt:
        console.print("Stopping.")
