"""Rare values in money: what each value method earns in five cases, many seeds, in one table.

An invented market: second price, rivals' best bid lognormal with median 3 CPM and sigma
0.8, cap 8 CPM, outcomes known at once, no budget, a new snapshot every 50 opportunities.
What is won counts at its mean value: single conversions are worth more than a whole run
earns, and their luck would drown every difference. Learning sees the values as drawn.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from service import money
from service.decision.learnability import LEARNING_COST, defaults, objection
from service.decision.methods import METHODS
from service.decision.terms import Terms
from service.learner.arrays import Numbers, double
from service.learner.rules import RARE_FROM
from service.rehearsal.market import (
    BasketValues,
    BernoulliValues,
    LognormalBids,
    Market,
    Path,
    Values,
)
from service.rehearsal.processes import spread
from service.rehearsal.run import play, play_fixed, play_many

OPPORTUNITIES = 50_000
BLOCK = 50
CAP = 8_000_000
CEILING = 50 * money.NANOS_PER_UNIT
TYPICAL = 2 * money.NANOS_PER_UNIT
RIVALS = LognormalBids(3_000_000, 0.8)
AT_ONCE = 1_250_000  # Opportunities of all runs held in memory together, or ten runs.
RUNS_AT_ONCE_MIN = 10
TREE_RUNS = 2  # Trees play one run at a time, the way of production.

ORACLE = "oracle (knows the mean value)"


@dataclass(frozen=True, slots=True)
class Case:
    """
    What values are, and what their line item says of them; money in nanos.

    Args:
        name: What it is called in the table.
        values: How they come.
        ceiling: Largest value of one event.
        typical: Usual value of one event.
    """

    name: str
    values: Values
    ceiling: int
    typical: int

    @property
    def worth(self) -> int:
        """The mean value of an impression, which the oracle bids up to the cap."""
        return round(self.values.mean)

    def paths(self, seeds: Sequence[int], opportunities: int) -> list[Path]:
        """One sequence of opportunities per seed."""
        market = Market(RIVALS, self.values)
        return [market.path(np.random.default_rng(seed), opportunities) for seed in seeds]


FREQUENT = 20_000_000  # 2.5 caps.
CAP_BINDS = Case("0.1 % x 50 EUR", BernoulliValues(0.001, CEILING), CEILING, CEILING)
BASKETS = Case("0.1 % x baskets of 2 EUR", BasketValues(0.001, TYPICAL, CEILING), CEILING, TYPICAL)
RAREST = Case("0.004 % x 50 EUR", BernoulliValues(0.00004, CEILING), CEILING, CEILING)
SMALL = Case("0.1 % x 2 EUR", BernoulliValues(0.001, TYPICAL), CEILING, TYPICAL)
OFTEN = Case("10 % x 2.5 caps", BernoulliValues(0.1, FREQUENT), FREQUENT, FREQUENT)
CASES = {case.name: case for case in (CAP_BINDS, BASKETS, RAREST, SMALL, OFTEN)}
RARE = Market(RIVALS, BASKETS.values)

WITHOUT = ", no prior"
# A price that somebody sets learns nothing, and these markets have no features to read.
LEFT_OUT = {"flat", "linear"}
# Every value method as it is by default, and those that take a prior also without one.
ENTRANTS: dict[str, tuple[str, float]] = {
    **{name: (name, 1.0) for name in METHODS if name not in LEFT_OUT},
    **{
        name + WITHOUT: (name, 0.0)
        for name, method in METHODS.items()
        if method.takes_prior and not method.needs_prior
    },
}


@dataclass(frozen=True, slots=True)
class Row:
    """
    Mean surplus of one entrant over all runs and its standard error, in currency units.

    Args:
        behind: What the oracle earned more on the same sequences.
        behind_error: The standard error of that.
        asks: Whether a line item like this is refused until learning cost is confirmed.
    """

    method: str
    surplus: float
    error: float
    behind: float = 0.0
    behind_error: float = 0.0
    asks: bool = False


@dataclass(frozen=True, slots=True)
class Job:
    """Some runs of one entrant in one case; picklable, for a process of its own."""

    case: str
    entrant: str
    opportunities: int
    seeds: tuple[int, ...]


Surpluses = dict[tuple[str, str], dict[int, int]]  # Case and entrant to seed to nanos.


def rare_config(
    method: str,
    case: Case = BASKETS,
    conversions: float = 1.0,
    expected: int | None = None,
    **settings: float,
) -> Mapping[str, Any]:
    """The line item of a case under one method, everything else at its default."""
    guess = {"conversions": conversions, "per_impression": expected}
    value = {
        "ceiling": case.ceiling,
        "typical": case.typical,
        "arrival": "accrues",
        "expected": guess,
    }
    policy = {"method": method, **settings}
    config = {"currency": "EUR", "bid_cap": CAP, "auction": "second", "losses": "priced"}
    return defaults({**config, "value": value, "policy": policy})[0]


def rare_terms(
    method: str,
    case: Case = BASKETS,
    conversions: float = 1.0,
    expected: int | None = None,
    **settings: float,
) -> Terms:
    """The terms of `rare_config`."""
    return Terms.from_config(rare_config(method, case, conversions, expected, **settings))


def rare_paths(seeds: Sequence[int]) -> list[Path]:
    """One sequence of opportunities of the second case per seed."""
    return BASKETS.paths(seeds, OPPORTUNITIES)


def offered(entrant: str, case: Case) -> bool:
    """Whether the service offers it: no tree and no ellipsoid where one value is many caps."""
    method = METHODS[ENTRANTS[entrant][0]]
    return not (method.by_law or method.by_features) or case.ceiling <= RARE_FROM * CAP


def jobs(
    cases: Sequence[str], entrants: Sequence[str], opportunities: int, runs: int, seed: int
) -> list[Job]:
    """Everything to be played, the oracle first."""
    return [
        Job(case, entrant, opportunities, seeds)
        for entrant in (ORACLE, *entrants)
        for case in cases
        if entrant == ORACLE or offered(entrant, CASES[case])
        for seeds in _chunks(entrant, opportunities, runs, seed)
    ]


def played(job: Job) -> list[int]:
    """The surplus of each seed, in nanos, what is won counted at its mean value."""
    case, found = CASES[job.case], list[int]()
    paths = case.paths(job.seeds, job.opportunities)
    if job.entrant == ORACLE:
        at_mean = [_at_mean(path, case) for path in paths]
        return [int(one) for one in play_fixed(at_mean, min(case.worth, CAP))]
    method, conversions = ENTRANTS[job.entrant]
    terms = rare_terms(method, case, conversions)
    # By the seeds of the chunk, so that the process it runs in does not matter.
    rng = np.random.default_rng([job.seeds[0], job.opportunities])
    if not METHODS[method].by_law:
        return [int(one) for one in play_many(paths, terms, BLOCK, rng, case.worth)]
    for path in paths:
        bids = np.asarray(play(path, terms, BLOCK, rng).prices)
        found.append(int(np.where(path.competing <= bids, case.worth - path.competing, 0).sum()))
    return found


def rows(case: str, surpluses: Surpluses) -> list[Row]:
    """The table of one case; the oracle's row is first, and 0 behind itself."""
    oracle = surpluses[case, ORACLE]
    return [
        _row(entrant, CASES[case], by_seed, oracle)
        for (of, entrant), by_seed in surpluses.items()
        if of == case
    ]


def play_all(todo: Sequence[Job], processes: int, advance: Callable[[], object]) -> Surpluses:
    """Play the jobs in so many processes; `advance` is called after each."""
    found: Surpluses = {(job.case, job.entrant): {} for job in todo}
    for job, surpluses in spread(played, todo, processes):
        found[job.case, job.entrant].update(zip(job.seeds, surpluses, strict=True))
        advance()
    return found


def rare_table(
    methods: Sequence[str], runs: int = 200, seed: int = 0, case: Case = BASKETS
) -> list[Row]:
    """Play each entrant and the oracle on the same sequences of one case, in this process."""
    found: Surpluses = {}
    for job in jobs([case.name], methods, OPPORTUNITIES, runs, seed):
        by_seed = found.setdefault((job.case, job.entrant), {})
        by_seed.update(zip(job.seeds, played(job), strict=True))
    return rows(case.name, found)


def _chunks(entrant: str, opportunities: int, runs: int, seed: int) -> Iterator[tuple[int, ...]]:
    tree = entrant != ORACLE and METHODS[ENTRANTS[entrant][0]].by_law
    runs = min(runs, TREE_RUNS) if tree else runs
    size = 1 if tree else max(AT_ONCE // opportunities, RUNS_AT_ONCE_MIN)
    for first in range(seed, seed + runs, size):
        yield tuple(range(first, min(first + size, seed + runs)))


def _at_mean(path: Path, case: Case) -> Path:
    return replace(path, values=np.full_like(path.values, case.worth))


def _row(entrant: str, case: Case, by_seed: dict[int, int], oracle: dict[int, int]) -> Row:
    own = _units([by_seed[seed] for seed in sorted(by_seed)])
    # Of the same seeds only: trees play fewer of them than the oracle.
    best = _units([oracle[seed] for seed in sorted(by_seed)])
    surplus, behind = _mean(own), _mean(best - own)
    if entrant == ORACLE:
        return Row(entrant, *surplus)
    method, conversions = ENTRANTS[entrant]
    found = objection(rare_config(method, case, conversions), None)
    return Row(entrant, *surplus, *behind, found is not None and found.code == LEARNING_COST)


def _units(nanos: Sequence[int]) -> Numbers:
    return double(nanos) / money.NANOS_PER_UNIT


def _mean(units: Numbers) -> tuple[float, float]:
    error = float(units.std(ddof=1) / np.sqrt(units.size)) if units.size > 1 else float("nan")
    return float(units.mean()), error
