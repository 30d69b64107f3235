"""Narrower lines than the interval without a model, each under an assumption that is named.

Apart from the bounds, which nothing can prove wrong: these are right only where what they assume
is, and none of it can be read off the log. A line speaks of what unknown values would bring on
average, and its level is that of its intervals joined (Bonferroni).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

from service.learner import count_sequences
from service.learner.rules import RARE_FROM
from service.rehearsal.alternatives import Alternative
from service.rehearsal.auction_log import WON, Logged
from service.rehearsal.hindsight_bounds import Account, Purse

RISK = 0.05
NARROWEST = 1000.0
NARROWEST_HITS = 10.0
VALUES_ALIKE = (
    "assumes that impressions that were not bought bring on average what those that were bought "
    "do, whatever the competing bid, and that values do not depend on each other; level 95 %, by "
    "a sequence that holds at every moment"
)
RARE = "; counts of impressions that brought something times their mean amount, whose own error "


@dataclass(frozen=True, slots=True)
class Worth:
    """
    What is known of the value of an impression; money in nanos.

    Args:
        ceiling: Largest value.
        cap: Of the line item; ceilings far above it are of values that come rarely.
        typical: Usual value of one event.
        priced: Whether the source tells the competing bid of every loss.
    """

    ceiling: int
    cap: int
    typical: int
    priced: bool = False


class Line(NamedTuple):
    """
    One line under assumptions; money in nanos.

    Args:
        label: Its name.
        low: Lower end of the surplus of the whole log.
        high: Upper end.
        auctions: How many opportunities it rests on.
        assumes: What must hold, in words.
        level: Its level; None where its limits are a rough guide.
    """

    label: str
    low: int
    high: int
    auctions: int
    assumes: str
    level: float | None = 1.0 - RISK


def mean_value(rows: Sequence[Logged], worth: Worth, risk: float = RISK) -> tuple[int, int]:
    """Limits of the mean value of an impression bought whose value is known, in nanos."""
    values = [row.low for row in rows if row.result == WON and not row.open]
    total, known = float(sum(values)), float(len(values))
    # Of values far above the cap hardly any is seen, and a bound by their range says nothing.
    if worth.ceiling <= RARE_FROM * worth.cap:
        hits = min(total / worth.ceiling, known)
        low, high = count_sequences.bernoulli_interval(hits, known, risk, NARROWEST)
        return int(low * worth.ceiling), min(worth.ceiling, int(high * worth.ceiling) + 1)
    converted = float(sum(value > 0 for value in values))
    amount = total / converted if converted else float(worth.typical)
    tuned = NARROWEST_HITS * worth.typical / max(worth.cap // 2, 1)
    low, high = count_sequences.poisson_interval(converted, known, risk, tuned)
    top = float(high) * amount
    return int(low * amount), worth.ceiling if top >= worth.ceiling else int(top) + 1


def values_alike(rows: Sequence[Logged], other: Alternative, worth: Worth) -> Line:
    """The bounds with every unseen value put between the limits of the mean value."""
    mean = mean_value(rows, worth)
    account = Account(other, Purse())
    for row in rows:
        # Of an open window the part that is still to come is as unknown as the whole.
        account.take(_settled(row, mean), mean)
    rare = worth.ceiling > RARE_FROM * worth.cap
    words = VALUES_ALIKE + (f"{RARE}is not in it" if rare else "")
    sums = account.sums
    return Line("values_alike", sums.low, sums.high, sums.auctions, words)


def _settled(row: Logged, mean: tuple[int, int]) -> Logged:
    if not row.open:
        return row
    return Logged(
        *(row.auction, row.bid, row.result, max(mean[1], row.low), max(mean[0], row.low)),
        *(row.floor, row.price, row.price_low, row.least, row.source),
        *(row.reason, row.set_by, row.at_ms, row.day),
    )
