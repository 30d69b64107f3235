"""The rare-value case: one conversion in a thousand impressions, many seeds, in one table.

An invented market: second price, rivals' best bid lognormal with median 3 CPM and sigma
0.8, cap 8 CPM, 50,000 opportunities, exponential baskets of mean 2 EUR cut at 50 EUR.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service import money
from service.decision.learnability import defaults
from service.decision.terms import Terms
from service.rehearsal.market import BasketValues, LognormalBids, Market, Nanos, Path
from service.rehearsal.run import play_fixed, play_many

OPPORTUNITIES = 50_000
BLOCK = 50
CAP = 8_000_000
CEILING = 50 * money.NANOS_PER_UNIT
TYPICAL = 2 * money.NANOS_PER_UNIT
RARE = Market(LognormalBids(3_000_000, 0.8), BasketValues(0.001, TYPICAL, CEILING))
AT_ONCE = 25  # Runs held in memory together.

ORACLE = "oracle (knows the mean value)"


@dataclass(frozen=True, slots=True)
class Row:
    """Mean surplus of one method over all runs and its standard error, in currency units."""

    method: str
    surplus: float
    error: float


def rare_terms(method: str, **settings: float) -> Terms:
    """The line item of the case under one method, everything else at its default."""
    value = {"ceiling": CEILING, "typical": TYPICAL, "arrival": "accrues"}
    policy = {"method": method, **settings}
    config = {"currency": "EUR", "bid_cap": CAP, "auction": "second"}
    return Terms.from_config(defaults({**config, "value": value, "policy": policy})[0])


def rare_paths(seeds: Sequence[int]) -> list[Path]:
    """One sequence of opportunities per seed."""
    return [RARE.path(np.random.default_rng(seed), OPPORTUNITIES) for seed in seeds]


def rare_table(methods: Sequence[str], runs: int = 200, seed: int = 0) -> list[Row]:
    """Play each method and the oracle on the same sequences; the oracle's row is first."""
    surpluses: dict[str, list[Nanos]] = {name: [] for name in (ORACLE, *methods)}
    for first in range(seed, seed + runs, AT_ONCE):
        paths = rare_paths(range(first, min(first + AT_ONCE, seed + runs)))
        surpluses[ORACLE].append(play_fixed(paths, int(RARE.values.mean)))
        for name in methods:
            surpluses[name].append(play_many(paths, rare_terms(name), BLOCK))
    return [_row(name, np.concatenate(parts)) for name, parts in surpluses.items()]


def _row(method: str, surplus: Nanos) -> Row:
    units = surplus / money.NANOS_PER_UNIT
    error = float(units.std(ddof=1) / np.sqrt(units.size))
    return Row(method, float(units.mean()), error)
