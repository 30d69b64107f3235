"""`bidkeel bench real`: real sealed bids through the running service, apart from reading them.

The real auctions were first-price. Here they are replayed as second-price ones: one bidder of
each is us, and the highest of the others is the price. Value and price are correlated in them
(a good stand of timber draws high bids from everybody), so what is won is not what is on sale:
the learnt value is the mean over what was won, and the gap to the mean over all is selection.
"""

from __future__ import annotations

import argparse
import tempfile
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import uvloop
from rich.console import Console

from service import money
from service.commands import caller, options, report, timber
from service.commands.exchange import Auction, Book, Exchange
from service.commands.server_process import ServerProcess

LINE_ITEM = "timber"
CURRENCY = "EUR"
BUDGET = money.nanos("10.00")
CAP = money.price(5)
CEILING = money.nanos("0.01")
BODY: dict[str, object] = {
    "id": LINE_ITEM,
    "name": "Real timber auctions, one times the advertised value = 1 EUR CPM",
    "currency": CURRENCY,
    "budget": money.nanos_text(BUDGET),
    "bid_cap_cpm": money.cpm_number(CAP),
    "value": {"ceiling": money.nanos_text(CEILING), "typical": "0.0015", "arrival": "once"},
    "policy": {"method": "kl-ucbid"},
}


@dataclass(frozen=True, slots=True)
class Outcome:
    """Everything the bench found; money in nanos, values per impression."""

    auctions: list[Auction]
    dropped: Counter[str]
    book: Book
    learnt: caller.Learnt

    @property
    def mean_won(self) -> float:
        """The mean value over won auctions, each cut at the ceiling as the learner cuts it."""
        return _mean(self.book.won)

    @property
    def mean_all(self) -> float:
        """The mean value over all auctions played, won or not, cut at the same ceiling."""
        return _mean(self.auctions)

    @property
    def kept(self) -> bool:
        """Whether budget and cap held and both sides count the same money."""
        money_agrees = self.book.charged == self.learnt.spent <= BUDGET
        return money_agrees and self.book.bid_max <= CAP


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=7, help="chooses which bidder is us")
    parser.add_argument("--limit", type=options.count, default=None, help="only the first auctions")
    parser.add_argument(
        "--csv", type=Path, help="only write the auctions, for `bidkeel rehearse --csv`"
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Play the real auctions through a server of its own.

    Returns:
        0 when budget and cap held and both sides' books agree to the nano, 1 when not,
        2 when the package with the auctions is missing.
    """
    try:
        lots = timber.read(timber.DISTRIBUTION)[: arguments.limit]
    except timber.DataMissing as missing:
        Console(stderr=True).print(str(missing), highlight=False)
        return 2
    if arguments.csv is not None:
        return _write(lots, arguments.seed, arguments.csv)
    with tempfile.TemporaryDirectory(prefix="bidkeel-bench-") as directory:
        with ServerProcess(Path(directory)) as server, report.progress() as bar:
            task = bar.add_task("Real auctions over HTTP", total=len(lots))
            played = play(server, lots, arguments.seed, lambda count: bar.advance(task, count))
            outcome = uvloop.run(played)
    _show(outcome, arguments.json)
    return 0 if outcome.kept else 1


def _write(lots: list[timber.Lot], seed: int, path: Path) -> int:
    auctions, dropped = timber.auctions(lots, LINE_ITEM, seed)
    count = timber.write_csv(auctions, path)
    Console(stderr=True).print(
        f"{count:,} auctions in {path}; left out: {report.reasons(dropped)}", highlight=False
    )
    return 0


async def play(
    server: ServerProcess, lots: list[timber.Lot], seed: int, advance: Callable[[int], None]
) -> Outcome:
    """
    Play the sound lots and wait until everything is taught.

    Args:
        server: Running, with an admin key.
        lots: In the order to play.
        seed: Chooses our bidder in each lot.
        advance: Called with the number of lots just played or dropped.
    """
    auctions, dropped = timber.auctions(lots, LINE_ITEM, seed)
    advance(dropped.total())
    async with server.wire() as wire:
        await caller.create(wire, BODY)
        exchange = Exchange(wire)
        await exchange.play(auctions, advance)
        # Where no lot was sound, the exchange has opened no book.
        book = exchange.books.setdefault(LINE_ITEM, Book())
        learnt = await caller.learnt(wire, LINE_ITEM, book.wins)
    return Outcome(auctions, dropped, book, learnt)


def _mean(auctions: list[Auction]) -> float:
    cut = [min(auction.value or 0, CEILING) for auction in auctions]
    return sum(cut) / len(cut) if cut else 0.0


def _show(outcome: Outcome, for_a_program: bool) -> None:
    console = Console()
    if for_a_program:
        console.print_json(data=_data(outcome))
        return
    rows = {name: [write(outcome)] for name, write in _ROWS.items()}
    console.print(report.table("Real sealed bids through the service", [LINE_ITEM], rows))
    console.print(timber.CITATION, style="dim", highlight=False)


def _selection(outcome: Outcome) -> str:
    return report.cpm(outcome.mean_won - outcome.mean_all)


_ROWS: dict[str, Callable[[Outcome], str]] = {
    "method": lambda o: "kl-ucbid, second price",
    "auctions played (count)": lambda o: f"{o.book.auctions:,}",
    "dropped (count, reason)": lambda o: report.reasons(o.dropped),
    "passes (count, reason)": lambda o: report.reasons(o.book.passes),
    "wins (count)": lambda o: f"{o.book.wins:,}",
    "win rate (wins per auction)": lambda o: report.share(o.book.wins, o.book.auctions),
    "values cut at the ceiling (count)": lambda o: f"{o.book.clipped:,}",
    "spent (EUR)": lambda o: money.nanos_text(o.learnt.spent),
    "charged by the exchange (EUR)": lambda o: money.nanos_text(o.book.charged),
    "budget (EUR)": lambda o: money.nanos_text(o.learnt.budget),
    "largest bid (CPM)": lambda o: report.cpm(o.book.bid_max),
    "bid cap (CPM)": lambda o: report.cpm(CAP),
    "learnt value (CPM)": lambda o: report.cpm(o.learnt.mean),
    "its interval (CPM)": lambda o: report.interval(o.learnt.low, o.learnt.high),
    "mean value over won (CPM)": lambda o: report.cpm(o.mean_won),
    "mean value over all (CPM)": lambda o: report.cpm(o.mean_all),
    "selection, won - all (CPM)": _selection,
}


def _data(outcome: Outcome) -> dict[str, object]:
    book, learnt = outcome.book, outcome.learnt
    return {
        "auctions": book.auctions,
        "dropped": dict(outcome.dropped),
        "passes": dict(book.passes),
        "wins": book.wins,
        "clipped": book.clipped,
        "currency": CURRENCY,
        "budget": money.nanos_text(learnt.budget),
        "spent": money.nanos_text(learnt.spent),
        "charged": money.nanos_text(book.charged),
        "bid_max_cpm": money.cpm_number(book.bid_max),
        "bid_cap_cpm": money.cpm_number(CAP),
        "learnt_cpm": money.cpm_number(learnt.mean),
        "learnt_low_cpm": money.cpm_number(learnt.low),
        "learnt_high_cpm": money.cpm_number(learnt.high),
        "mean_won_cpm": outcome.mean_won / money.NANOS_PER_CPM,
        "mean_all_cpm": outcome.mean_all / money.NANOS_PER_CPM,
        "selection_cpm": (outcome.mean_won - outcome.mean_all) / money.NANOS_PER_CPM,
    }
