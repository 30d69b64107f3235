"""Invented records of line items for the rules, apart from the tests that judge them."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any

from service.tripwires.counts import Counts, Series, plus
from service.tripwires.history import Facts
from service.tripwires.judging import judge
from service.tripwires.saying import Finding
from service.tripwires.setups import WARN, Setup, setups_of

MINUTE_MS, HOUR_MS, DAY_MS = 60_000, 3_600_000, 86_400_000
VALUE = 2_000_000_000  # Nanos: what a conversion brings.
LOG = round(1000 * math.log(VALUE))
# What one usual minute does: half of the bids are won at 1 CPM, a few bring a value, most a zero.
USUAL = Counts(
    bids=20, wins=10, losses=9, voids=1, paid=10_000_000, spent=10_000_000, words=10, zeros=8,
    logs=2 * LOG, log_squares=2 * LOG * LOG,
)  # fmt: skip

Minute = Callable[[int], Counts]


def facts(
    minutes: int, usual: Minute = lambda _: USUAL, last: Minute | None = None, of_last: int = 0,
    **known: Any,
) -> Facts:  # fmt: skip
    """A record of so many minutes, the last of which may be others; `known` are bare facts."""
    spoilt = minutes - of_last
    rows = [
        (number * MINUTE_MS, (last if last and number >= spoilt else usual)(number))
        for number in range(minutes)
    ]
    series = [Series(width, summed(rows, width)) for width in (MINUTE_MS, HOUR_MS, DAY_MS)]
    said = {"arrival": "once", "currency": "EUR", **known}
    return Facts(minutes * MINUTE_MS - 1, series[0], series[1], series[2], **said)


def summed(rows: list[tuple[int, Counts]], width: int) -> list[tuple[int, Counts]]:
    """The same rows in wider buckets."""
    wide = dict[int, Counts]()
    for start, counts in rows:
        at = start - start % width
        wide[at] = plus(wide[at], counts) if at in wide else counts
    return sorted(wide.items())


def found(known: Facts, **rules: Mapping[str, Any]) -> dict[str, Finding]:
    """What the default rules find, or these settings of them."""
    config = {"tripwires": {name: {"action": WARN, **said} for name, said in rules.items()}}
    return {finding.rule: finding for finding in judge(known, setups_of(config))}


def alone(rule: str, **said: Any) -> dict[str, Setup]:
    """One rule and no other."""
    return {rule: setups_of({"tripwires": {rule: said}})[rule]}
