"""Narrower lines than the interval without a model, each under an assumption that is named.

Apart from the bounds, which nothing can prove wrong: these are right only where what they assume
is, and none of it can be read off the log. A line speaks of what unknown values would bring on
average, and its level is that of its intervals joined (Bonferroni).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from service.decision.market import drawable
from service.decision.rule import FIRST, SECOND
from service.learner import count_sequences
from service.learner.arrays import Numbers, double
from service.learner.curve import Curve, curve
from service.learner.curve_counts import Counts, add, fitting
from service.learner.market_part import said
from service.learner.rules import RARE_FROM
from service.rehearsal.alternatives import Alternative
from service.rehearsal.auction_log import LOST, WON, Logged
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
RIVALS = {
    "kaplan-meier": "assumes besides that competing bids are independent of ours and of values, "
    "given the source, and of one law (Kaplan, Meier 1958, with Greenwood's limits)",
    "empirical": "assumes besides that competing bids are independent of ours and of values, "
    "given the source, and of one law (Dvoretzky, Kiefer, Wolfowitz 1956)",
    "reverse-kaplan-meier": "assumes besides that competing bids are independent of ours and of "
    "values, given the source, and of one law (product limit, reversed)",
    "isotonic": "assumes besides that competing bids are independent of ours and of values, given "
    "the source, of one law, and only that a higher bid wins no less (monotone)",
    "turnbull": "assumes besides that competing bids are independent of ours and of values, given "
    "the source, and of one law (Turnbull 1976)",
}
ROUGH = frozenset({"isotonic", "turnbull"})  # Their limits are a guide and keep no level.


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


def rivals_alike(rows: Sequence[Logged], price: int, worth: Worth) -> Line | None:
    """
    A flat price against each source's win curve; None where no auction told anything.

    Opportunities that no curve speaks of, as those passed, keep their bounds.
    """
    mean = mean_value(rows, worth, RISK / 2.0)
    rest, other = (
        Account(Alternative("flat", price), Purse()),
        dict[tuple[str, str], list[Logged]](),
    )
    for row in rows:
        if row.result in (WON, LOST) and row.auction in (FIRST, SECOND):
            other.setdefault((row.auction, row.source), []).append(row)
        else:
            rest.take(row, mean)
    if not other:
        return None
    low, high = float(rest.sums.low), float(rest.sums.high)
    methods = set[str]()
    # Each curve has its part of the risk, since all must hold at once.
    level = 1.0 - RISK / 2.0 / len(other)
    for (auction, _), told in sorted(other.items()):
        one = curve(_counts(told, price, priced=worth.priced), level)
        methods.add(one.method)
        ends = _surplus(one, auction, price, mean)
        low, high = low + len(told) * ends[0], high + len(told) * ends[1]
    words = " ".join([VALUES_ALIKE + ";", *sorted({RIVALS.get(one, one) for one in methods})])
    sure = None if methods & ROUGH else 1.0 - RISK
    seen = sum(map(len, other.values()))
    return Line("rivals_alike", int(np.floor(low)), int(np.ceil(high)), seen, words, sure)


def _settled(row: Logged, mean: tuple[int, int]) -> Logged:
    if not row.open:
        return row
    return Logged(
        *(row.auction, row.bid, row.result, max(mean[1], row.low), max(mean[0], row.low)),
        *(row.floor, row.price, row.price_low, row.least, row.source),
        *(row.reason, row.set_by, row.at_ms, row.day),
    )


def _counts(rows: Sequence[Logged], price: int, *, priced: bool) -> Counts:
    ticks = fitting(max(price, max(row.bid for row in rows), 2))
    outcomes = []
    for row in rows:
        body = {"bid": row.bid, "to_win": row.least, "price": row.price}
        outcome = said(row.result == WON, row.auction, body, ticks, priced=priced)
        if outcome is not None:
            outcomes.append(outcome)
    return drawable(add(Counts(ticks), outcomes))


def _surplus(one: Curve, auction: str, price: int, mean: tuple[int, int]) -> tuple[float, float]:
    """The least and the most an auction earns at the price, with the limits of value and curve."""
    below = int(np.searchsorted(one.price, price, side="right")) - 1
    above = min(below if one.price[below] == price else below + 1, one.price.size - 1)
    low, high = float(one.low[below]), float(one.high[above])
    gain_low, gain_high = mean[0] - price, mean[1] - price
    earned_low = gain_low * (high if gain_low < 0 else low)
    earned_high = gain_high * (low if gain_high < 0 else high)
    if auction == FIRST:
        return earned_low, earned_high
    # The area under the chance up to the price: what is paid less than the price. Within a tick
    # the curve may rise anywhere, so the least takes its lower edge and the most its upper one.
    steps = np.diff(np.append(one.price[: below + 1], price))
    upper: Numbers = double(one.high[np.minimum(np.arange(below + 1) + 1, above)])
    return (
        earned_low + float(one.low[: below + 1] @ steps),
        earned_high + float(upper @ steps),
    )
