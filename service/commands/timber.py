"""Real sealed bids out of an installed package, apart so that reading them needs no server.

The PyPI package `simple-fpa` 1.8 (MIT licence) carries `haile_data.csv`: 60,758 bids in 16,469
first-price sealed-bid auctions of US timber. Its metadata names the paper: Pasha Andreyanov and
Grigory Franguridi, "Nonparametric inference on counterfactuals in sealed first-price auctions",
arXiv:2106.13856. The file is read where it was installed, and none of the package's code runs.
"""

from __future__ import annotations

import csv
import math
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass
from importlib import metadata
from pathlib import Path

import numpy as np

from service import money
from service.commands.exchange import Auction
from service.errors import BidkeelError

DISTRIBUTION = "simple-fpa"
FILE_NAME = "haile_data.csv"
CITATION = (
    "Bids: US timber auctions in the PyPI package simple-fpa 1.8 (MIT), "
    "P. Andreyanov, G. Franguridi, arXiv:2106.13856."
)
# A timber bid is rarely many times the advertised value: of the 60,758 ratios 99.7 % are below
# 20, the median is 1.3. Above stands a thin tail and then a heap between 1,000 and 6,600 with
# one at 306,373, which can only be slips of the unit; alone they would move the mean from 1.7
# to 7.9. An auction with one such bid says nothing sure about its others, so it goes whole.
RATIO_MAX = 20.0
# One times the advertised value is one unit of CPM, so a ratio has six exact decimals.
CPM_PER_RATIO = 1
CPM_PER_PRICE = 1000  # A price per impression as CPM.


class DataMissing(BidkeelError):
    """The package that carries the auctions is not installed, or not as we know it."""


@dataclass(frozen=True, slots=True)
class Lot:
    """One real auction: the advertised value and all sealed bids, in the file's own money."""

    advertised: float
    bids: tuple[float, ...]


def read(distribution: str) -> list[Lot]:
    """
    Read the auctions in the order of the file.

    Args:
        distribution: The installed package that carries the file.

    Raises:
        DataMissing: The package or its file is not there.
    """
    advertised: dict[str, float] = {}
    bids: dict[str, list[float]] = {}
    with _path(distribution).open(encoding="utf-8", newline="") as file:
        for row in csv.DictReader(file):
            advertised.setdefault(row["auctionid"], _number(row["adv_value"]))
            bids.setdefault(row["auctionid"], []).append(_number(row["actual_bid"]))
    return [Lot(advertised[name], tuple(of_lot)) for name, of_lot in bids.items()]


def fault(lot: Lot) -> str | None:
    """Why the lot is not played, None when it is sound."""
    if not all(math.isfinite(number) for number in (lot.advertised, *lot.bids)):
        return "not a finite number"
    if lot.advertised <= 0:
        return "no advertised value"
    if min(lot.bids) <= 0:
        return "a bid not above zero"
    if len(lot.bids) < 2:
        return "a single bidder"
    if max(lot.bids) > RATIO_MAX * lot.advertised:
        return f"a bid above {RATIO_MAX:.0f} x the advertised value"
    return None


def auctions(lots: Iterable[Lot], line_item: str, seed: int) -> tuple[list[Auction], Counter[str]]:
    """
    Turn sound lots into second-price auctions in which one bidder of each is us.

    Args:
        lots: In the order to play.
        line_item: Whose impressions they become.
        seed: Chooses our bidder in each lot; the highest other bid competes with us, and our
            bidder's own bid, over the advertised value, is what the impression is worth.

    Returns:
        The auctions, and how many lots were dropped for which reason.
    """
    generator = np.random.default_rng(seed)
    dropped: Counter[str] = Counter()
    played: list[Auction] = []
    for number, lot in enumerate(lots):
        # Drawn for every lot, so that who we are in one does not hang on which are dropped.
        ours = int(generator.integers(max(1, len(lot.bids))))
        reason = fault(lot)
        if reason is None:
            played.append(_auction(lot, ours, line_item, number))
        else:
            dropped[reason] += 1
    return played, dropped


def write_csv(played: Iterable[Auction], path: Path) -> int:
    """Write auctions in the columns that `bidkeel rehearse --csv` reads; returns how many."""
    count = 0
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["highest_competing_cpm", "value", "source"])
        for auction in played:
            rival = money.nanos_text(auction.rival * CPM_PER_PRICE)
            writer.writerow([rival, money.nanos_text(auction.value or 0), DISTRIBUTION])
            count += 1
    return count


def _auction(lot: Lot, ours: int, line_item: str, number: int) -> Auction:
    rival = max(lot.bids[:ours] + lot.bids[ours + 1 :])
    return Auction(line_item, number, _scaled(rival, lot), _scaled(lot.bids[ours], lot))


def _scaled(bid: float, lot: Lot) -> int:
    return round(bid / lot.advertised * CPM_PER_RATIO * money.NANOS_PER_CPM)


def _number(text: str) -> float:
    return float(text) if text else math.nan


def _path(distribution: str) -> Path:
    try:
        files = metadata.files(distribution) or []
    except metadata.PackageNotFoundError:
        raise DataMissing(
            f"The package {distribution} is not installed; it comes with the extra: "
            "pip install 'bidkeel[real]'."
        ) from None
    for file in files:
        if file.name == FILE_NAME:
            return Path(str(file.locate()))
    raise DataMissing(f"The package {distribution} does not carry {FILE_NAME}.")
