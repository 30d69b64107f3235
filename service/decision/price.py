"""The decision: a snapshot, an opportunity and a generator in, a price or a pass out.

Pure: no clock, no storage, no waiting. Everything that does not depend on the opportunity
is worked out once per snapshot by `ready`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.random import Generator

from service.decision import brakes
from service.decision.method import Counts
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.rule import RULES
from service.decision.terms import Terms
from service.learner.interval import IN_WORDS, mean_interval
from service.learner.tally import Tally

NO_VALUE = "no_value"
LEARNER_HALTED = "learner_halted"

LARGEST_SHOWN = 2**500  # Far above any sum of money, far below where floats end.

BY_VALUE = "value"
BY_CAP = "cap"


@dataclass(frozen=True, slots=True)
class Proposal:
    """A price in nanos per impression, rounded down, and what set it: value or cap."""

    price: int
    set_by: str


@dataclass(frozen=True, slots=True)
class Passed:
    """No price, and why."""

    reason: str


@dataclass(frozen=True, slots=True)
class Ready:
    """
    A snapshot made ready to answer opportunities.

    Args:
        tally: What is learnt.
        terms: What is configured.
        answer: What every opportunity is told; no method of this release tells them apart.
    """

    tally: Tally
    terms: Terms
    answer: Proposal | Passed

    def propose(self, opportunity: Opportunity, generator: Generator) -> Proposal | Passed:
        """
        Name a price for one opportunity.

        Args:
            opportunity: What is for sale; its floor is the guard's business.
            generator: The only source of chance, for methods that draw.
        """
        return self.answer

    def describe(self) -> dict[str, object]:
        """What is known and what is bid, for people; money as ints in nanos."""
        method = METHODS[self.terms.method]
        bid = self.answer if isinstance(self.answer, Proposal) else None
        return {
            "method": method.name,
            "settings": dict(self.terms.settings),
            **_known(self.tally, self.terms),
            "bid_nanos": bid.price if bid else None,
            "set_by": bid.set_by if bid else None,
            "pass": None if bid else _reason(self.answer),
            "source": method.source,
            "assumptions": method.assumes,
            "guarantee": method.guarantee(self.tally, self.terms),
        }


def ready(tally: Tally, terms: Terms) -> Ready:
    """Work out once what a snapshot answers."""
    return Ready(tally, terms, _answer(tally, terms))


def _answer(tally: Tally, terms: Terms) -> Proposal | Passed:
    method = METHODS[terms.method]
    bid = _bid(tally, terms)
    if bid is None:
        return Passed(LEARNER_HALTED)
    if method.learns and brakes.no_value(tally, terms):
        return Passed(NO_VALUE)
    if bid >= terms.cap:
        return Proposal(terms.cap, BY_CAP if bid > terms.cap else BY_VALUE)
    return Proposal(math.floor(bid), BY_VALUE)


def _bid(tally: Tally, terms: Terms) -> float | None:
    # A sum too large for a float, or a formula outside its range, must not become a price.
    try:
        with np.errstate(all="ignore"):
            value = METHODS[terms.method].index(Counts.of(tally), terms)
            bid = float(RULES[terms.auction](value))
    except OverflowError:
        return None
    return bid if math.isfinite(bid) and bid >= 0.0 else None


def _known(tally: Tally, terms: Terms) -> dict[str, object]:
    low, high = mean_interval(
        _shown(tally.known),
        _shown(tally.amount),
        _shown(tally.amount_square),
        float(terms.typical),
        float(terms.ceiling),
    )
    return {
        "wins": tally.wins,
        "known": tally.known,
        "converted": tally.converted,
        "mean_nanos": tally.amount // tally.known if tally.known > 0 else None,
        "low_nanos": math.floor(float(low)),
        "high_nanos": math.ceil(float(high)),
        "interval": IN_WORDS,
    }


def _shown(total: int) -> float:
    return float(min(max(total, 0), LARGEST_SHOWN))


def _reason(answer: Proposal | Passed) -> str | None:
    return answer.reason if isinstance(answer, Passed) else None
