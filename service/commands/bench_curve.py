"""`bidkeel bench curve`: win curves and first-price bids learnt from real sealed bids, in memory.

All bids of the auctions are known, so what a feed would have hidden can be hidden and compared
with the whole. Good timber draws high bids from everybody: our own bid and the highest other
one rise together, and every censored estimator asks that they do not. So the curves are drawn
twice, with our bid from another auction and, as a warning, with our own.
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from rich.console import Console

from service.commands import options, report, timber
from service.learner.curve_counts import Feed
from service.learner.partition import Ticks
from service.money import NANOS_PER_CPM
from service.rehearsal import censoring, first_price
from service.rehearsal.censoring import Distance
from service.rehearsal.first_price import Result, Scale

Nanos = NDArray[np.int64]

TICKS = Ticks(5 * NANOS_PER_CPM, NANOS_PER_CPM // 100)
SIZES = (100, 300, 1_000, 3_000, 10_000)
FEEDS: tuple[Feed, ...] = ("always", "on_win", "on_loss", "never")
SCALES: tuple[Scale, ...] = ("price", "share")
NAMES = {
    "always": "always told (empirical)",
    "on_win": "on a win (Kaplan-Meier)",
    "on_loss": "on a loss (reverse Kaplan-Meier)",
    "never": "never (isotonic)",
    "mixed": "by turns (Turnbull)",
}


@dataclass(frozen=True, slots=True)
class Figures:
    """
    Everything the bench found.

    Args:
        auctions: How many were sound.
        distances: By feed, whether our bids are from other auctions, and number of auctions.
        learners: By feed and scale of the learnt curve.
        value: What bidding the value brings.
        fixed_share: The best fixed share of the value in hindsight.
        fixed: What it brings.
    """

    auctions: int
    distances: dict[tuple[str, bool], list[Distance]]
    learners: dict[tuple[Feed, Scale], Result]
    value: Result
    fixed_share: float
    fixed: Result


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--seed", type=options.seed, default=7, help="chooses bidders and order")
    parser.add_argument("--limit", type=options.count, default=None, help="only the first auctions")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Learn from the real auctions and print what came of it.

    Returns:
        0, or 2 when the package with the auctions is missing.
    """
    try:
        lots = timber.read(timber.DISTRIBUTION)[: arguments.limit]
    except timber.DataMissing as missing:
        Console(stderr=True).print(str(missing), highlight=False)
        return 2
    _show(figures(lots, arguments.seed), arguments.json)
    return 0


def figures(lots: list[timber.Lot], seed: int) -> Figures:
    """
    Learn from sound lots.

    Args:
        lots: In the order to play.
        seed: Chooses our bidder in each, the order in which curves see them, and foreign bids.
    """
    played, _ = timber.auctions(lots, "timber", seed)
    competing, values = (
        np.array([getattr(one, name) for one in played], dtype=np.int64)
        for name in ("rival", "value")
    )
    share, fixed = first_price.best_fixed_share(competing, values)
    learners = {
        (feed, scale): first_price.replay(competing, values, feed, scale, TICKS)
        for feed in FEEDS
        for scale in SCALES
    }
    distances = _distances(competing, values, np.random.default_rng(seed))
    value = first_price.earned(competing, values, values)
    return Figures(len(played), distances, learners, value, share, fixed)


def _distances(
    competing: Nanos, values: Nanos, rng: np.random.Generator
) -> dict[tuple[str, bool], list[Distance]]:
    # Of all auctions, so that every size is judged by more than it has seen.
    truth, order = censoring.full(competing, TICKS), rng.permutation(len(competing))
    foreign = censoring.foreign_bids(values[order], TICKS, rng)
    own = censoring.own_bids(values[order], TICKS)
    sizes = [*(size for size in SIZES if size < len(order)), len(order)]
    return {
        (name, of is foreign): [
            censoring.distance(competing[order[:size]], of[:size], feeds, truth) for size in sizes
        ]
        for name, feeds in censoring.FEEDS.items()
        for of in (foreign, own)
    }


def _show(found: Figures, for_a_program: bool) -> None:
    console = Console()
    if for_a_program:
        console.print_json(data=_data(found))
        return
    heads = [f"{one.auctions:,}" for one in found.distances[("always", True)]]
    for foreign, whose in ((True, "bids from other auctions"), (False, "our own bids, a warning")):
        rows = {
            NAMES[name]: [f"{one.largest:.3f}" for one in of]
            for (name, is_foreign), of in found.distances.items()
            if is_foreign is foreign
        }
        title = f"Largest error of the win curve by number of auctions, {whose}"
        console.print(report.table(title, heads, rows))
    title = f"First price over {found.auctions:,} auctions"
    heads = ["surplus (CPM)", "of hindsight", "wins", "paid (CPM)"]
    console.print(report.table(title, heads, _bids(found)))
    console.print(timber.CITATION, style="dim", highlight=False)


def _bids(found: Figures) -> dict[str, list[str]]:
    rows = {
        "bid the value": found.value,
        f"best fixed share in hindsight, {found.fixed_share:.2f} of the value": found.fixed,
    }
    for (feed, scale), result in found.learners.items():
        rows[f"shade by the curve of the {scale}, told {feed.replace('_', ' ')}"] = result
    return {name: _cells(one, found.fixed) for name, one in rows.items()}


def _cells(one: Result, fixed: Result) -> list[str]:
    of = report.share(one.surplus, fixed.surplus)
    return [report.cpm(one.surplus), of, f"{one.wins:,}", report.cpm(one.paid)]


def _data(found: Figures) -> dict[str, object]:
    return {
        "auctions": found.auctions,
        "curves": [
            {
                "told": name,
                "bids": "foreign" if foreign else "own",
                "auctions": one.auctions,
                "largest_error": one.largest,
                "identified_share": one.identified,
                "covered_share": one.covered,
            }
            for (name, foreign), of in found.distances.items()
            for one in of
        ],
        "first_price": [
            {"told": feed, "curve_of": scale, **_sums(one)}
            for (feed, scale), one in found.learners.items()
        ],
        "bid_the_value": _sums(found.value),
        "best_fixed_share": {"share": found.fixed_share, **_sums(found.fixed)},
    }


def _sums(one: Result) -> dict[str, float]:
    sums = {"surplus_cpm": one.surplus / NANOS_PER_CPM, "paid_cpm": one.paid / NANOS_PER_CPM}
    return {**sums, "wins": one.wins}
