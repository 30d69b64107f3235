"""How `posterior-quantile` fares when what it was told of a rare value is wrong, in money.

The same market as in the table of methods. The true mean value is drawn for each run, log-
uniform from 0.5 to 20 CPM, with a fixed basket of 2 EUR; what the line item calls typical is
right or wrong by a factor, and its guess of an impression's value is the default, half the
cap, or a tenth of the truth.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from service import money
from service.decision.learnability import LEARNING_COST, objection
from service.decision.terms import Terms
from service.learner.arrays import Numbers
from service.rehearsal.market import BernoulliValues, Market, Nanos
from service.rehearsal.rare import BLOCK, CAP, CEILING, RIVALS, SMALL, TYPICAL, Case, rare_config
from service.rehearsal.run import play_fixed, play_many

METHOD = "posterior-quantile"
LOW, HIGH = 500_000, 20_000_000  # Mean values from 0.5 to 20 CPM.
RUNS_AT_ONCE = 25
FACTORS = {"typical right": 1.0, "typical a third": 1.0 / 3.0, "typical threefold": 3.0}


@dataclass(frozen=True, slots=True)
class Told:
    """
    What one line item earned over all runs, in currency units.

    Args:
        name: What it was told.
        surplus: Mean over all runs.
        oracle: The same for the oracle.
        behind_error: Standard error of their difference.
        warned: Whether the service asks to confirm the learning cost.
    """

    name: str
    surplus: float
    oracle: float
    behind_error: float
    warned: bool

    @property
    def behind(self) -> float:
        """What the oracle earned more."""
        return self.oracle - self.surplus

    @property
    def share(self) -> float:
        """What part of the oracle's surplus it earned."""
        return self.surplus / self.oracle


def values_drawn(runs: int, seed: int) -> Nanos:
    """The mean value of each run, in nanos."""
    rng = np.random.default_rng([seed, 20])
    return np.exp(rng.uniform(np.log(LOW), np.log(HIGH), runs)).astype(np.int64)


def by_typical(opportunities: int, runs: int, seed: int) -> list[Told]:
    """One row for each of `FACTORS`, over values drawn log-uniform."""
    worths = values_drawn(runs, seed)
    return [
        _told(name, _case(factor), None, worths, opportunities, seed)
        for name, factor in FACTORS.items()
    ]


def too_low(opportunities: int, runs: int, seed: int) -> Told:
    """A guess ten times too low, where the true mean value is 2 CPM."""
    worths = np.full(runs, SMALL.worth)
    return _told("guess a tenth", SMALL, SMALL.worth // 10, worths, opportunities, seed)


def _case(factor: float) -> Case:
    return Case("told", SMALL.values, CEILING, round(factor * TYPICAL))


def _told(
    name: str, case: Case, guess: int | None, worths: Nanos, opportunities: int, seed: int
) -> Told:
    config = rare_config(METHOD, case, expected=guess)
    terms, found = Terms.from_config(config), objection(config, None)
    own, best = _surpluses(terms, worths, opportunities, seed)
    error = float((best - own).std(ddof=1) / np.sqrt(best.size))
    warned = found is not None and found.code == LEARNING_COST
    return Told(name, float(own.mean()), float(best.mean()), error, warned)


def _surpluses(
    terms: Terms, worths: Nanos, opportunities: int, seed: int
) -> tuple[Numbers, Numbers]:
    own, best = list[Nanos](), list[Nanos]()
    for first in range(0, worths.size, RUNS_AT_ONCE):
        these = worths[first : first + RUNS_AT_ONCE]
        paths = [
            Market(RIVALS, BernoulliValues(worth / TYPICAL, TYPICAL)).path(
                np.random.default_rng([seed, first + run]), opportunities
            )
            for run, worth in enumerate(these.tolist())
        ]
        own.append(play_many(paths, terms, BLOCK, worth_each=these))
        for path, worth in zip(paths, these.tolist(), strict=True):
            # The learner has played, and what is won counts at its mean value as in the table.
            path.values[:] = worth
            best.append(play_fixed([path], min(worth, CAP)))
    unit = money.NANOS_PER_UNIT
    return np.concatenate(own) / unit, np.concatenate(best) / unit
