"""The decision: a snapshot, an opportunity and a generator in, a price or a pass out.

Pure: no clock, no storage, no waiting. Everything that does not depend on the opportunity
is worked out once per snapshot by `ready`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.random import Generator

from service.decision import brakes
from service.decision.counts import Counts
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.rule import RULES
from service.decision.terms import Terms
from service.learner import exptree_rules
from service.learner.bounds import Numbers
from service.learner.exptree_law import Law
from service.learner.exptree_state import UnreadableTree
from service.learner.growing import law_of
from service.learner.memory import Memory

NO_VALUE = "no_value"
LEARNER_HALTED = "learner_halted"

BY_VALUE = "value"
BY_CAP = "cap"
BY_ALLOWANCE = "allowance"

Offer = Callable[[], Numbers]


@dataclass(frozen=True, slots=True)
class Proposal:
    """A price in nanos per impression, rounded down, and what set it: value, cap, allowance."""

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
        memory: What is learnt.
        terms: What is configured, under the guess that lessons brought.
        counts: What an index reads of the two; None where the sums leave the range of floats.
        most: The most that may be bid for the allowance's sake, in nanos; None for no limit.
        answer: What every opportunity is told; for a method that draws, at the median.
        draws: Whether a price is drawn afresh for every opportunity.
        law: What prices are drawn from, for methods that bid by a law.
    """

    memory: Memory
    terms: Terms
    counts: Counts | None
    most: float | None
    answer: Proposal | Passed
    draws: bool
    law: Law | None = None

    def propose(self, opportunity: Opportunity, generator: Generator) -> Proposal | Passed:
        """
        Name a price for one opportunity.

        Args:
            opportunity: What is for sale; its floor is the guard's business.
            generator: The only source of chance, for methods that draw.
        """
        if self.law is not None:
            return Proposal(self.law.draw(generator), BY_VALUE)
        draw, counts, terms = METHODS[self.terms.method].draw, self.counts, self.terms
        if not self.draws or draw is None or counts is None or isinstance(self.answer, Passed):
            return self.answer
        return self._priced(lambda: draw(counts, terms, generator))

    def at(self, order: float) -> Proposal | Passed:
        """The price that a share `order` of the answers stays under; the price if all are alike."""
        if self.law is not None:
            return Proposal(self.law.quantile(order), BY_VALUE)
        quantile, counts, terms = METHODS[self.terms.method].quantile, self.counts, self.terms
        if not self.draws or quantile is None or counts is None:
            return self.answer
        return self._priced(lambda: quantile(counts, terms, order))

    def _priced(self, offer: Offer) -> Proposal | Passed:
        return _proposal(_bid(offer, self.terms), self.most, self.terms)


def ready(memory: Memory, terms: Terms) -> Ready:
    """Work out once what a snapshot answers."""
    guided = terms.guided(memory.prior)
    method, counts = METHODS[terms.method], _counts(memory, guided)
    if counts is None:
        return Ready(memory, guided, None, None, Passed(LEARNER_HALTED), draws=False)
    if guided.tree is not None:
        return _by_law(memory, guided, guided.tree, counts)
    total = memory.total
    most = brakes.allowance_bid(total, counts, guided) if method.learns else None
    if method.learns and brakes.no_value(total, guided):
        return Ready(memory, guided, counts, most, Passed(NO_VALUE), draws=False)
    bid = _bid(lambda: method.index(counts, guided), guided)
    draws = method.draw is not None
    return Ready(memory, guided, counts, most, _proposal(bid, most, guided), draws)


def _by_law(memory: Memory, terms: Terms, tree: exptree_rules.Rules, counts: Counts) -> Ready:
    try:
        law = law_of(memory.tree, tree)
    except UnreadableTree:
        # Grown under a cap or ceiling of before; a refold is on its way.
        return Ready(memory, terms, counts, None, Passed(LEARNER_HALTED), draws=False)
    median = Proposal(law.quantile(0.5), BY_VALUE)
    return Ready(memory, terms, counts, None, median, draws=True, law=law)


def _proposal(bid: float | None, most: float | None, terms: Terms) -> Proposal | Passed:
    if bid is None:
        return Passed(LEARNER_HALTED)
    set_by = BY_VALUE
    if most is not None and bid > most:
        bid, set_by = most, BY_ALLOWANCE
    if bid >= terms.cap:
        return Proposal(terms.cap, BY_CAP if bid > terms.cap else set_by)
    return Proposal(math.floor(bid), set_by)


def _counts(memory: Memory, terms: Terms) -> Counts | None:
    # A sum too large for a float must not become a price.
    try:
        with np.errstate(all="ignore"):
            counts = Counts.of(memory, terms)
    except OverflowError:
        return None
    return counts if all(np.isfinite(one) for one in counts.all) else None


def _bid(offer: Offer, terms: Terms) -> float | None:
    # Nor must a formula outside its range.
    with np.errstate(all="ignore"):
        bid = float(RULES[terms.auction](offer()))
    return bid if math.isfinite(bid) and bid >= 0.0 else None
