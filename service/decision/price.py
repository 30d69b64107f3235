"""The decision: a snapshot, an opportunity and a generator in, a price or a pass out.

Pure: no clock, no storage, no waiting. Everything that does not depend on the opportunity
is worked out once per snapshot by `ready`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.random import Generator

from service.decision import brakes
from service.decision.counts import Counts
from service.decision.market import UNTOLD, Market, market_of
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.rule import FIRST, OF_SALE, SECOND, Sale, sale_of
from service.decision.terms import Terms
from service.decision.valuing import Valuing, valuing_of
from service.learner import exptree_rules
from service.learner.bounds import Numbers
from service.learner.exptree_law import Law
from service.learner.exptree_state import UnreadableTree
from service.learner.growing import law_of
from service.learner.memory import Memory, UnreadableMemory

NO_VALUE = "no_value"
LEARNER_HALTED = "learner_halted"

BY_VALUE = "value"
BY_CAP = "cap"
BY_ALLOWANCE = "allowance"

Offer = Callable[[], Numbers]


@dataclass(frozen=True, slots=True)
class Proposal:
    """
    A price in nanos per impression, rounded down, and what set it: value, cap, allowance.

    Args:
        value: What the price was made from, where it is another; no part of the answer.
    """

    price: int
    set_by: str
    value: int | None = field(default=None, compare=False)


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
        market: What may be offered where one pays what one bids.
        valuing: What single opportunities are worth, where not all are alike.
        hold: What budget and return target make of a value.
    """

    memory: Memory
    terms: Terms
    counts: Counts | None
    most: float | None
    answer: Proposal | Passed
    draws: bool
    law: Law | None = None
    market: Market = UNTOLD
    valuing: Valuing | None = None
    hold: brakes.Brakes = brakes.NO_BRAKES

    def propose(
        self, opportunity: Opportunity, generator: Generator, sale: Sale | None = None
    ) -> Proposal | Passed:
        """
        Name a price for one opportunity.

        Args:
            opportunity: What is for sale; its floor is the guard's business.
            generator: The only source of chance, for methods that draw.
            sale: What the opportunity stands for, where the caller knows it already.
        """
        sale = sale or sale_of(opportunity, self.terms.auction)
        return self._sold(self._valued(opportunity, generator), sale)

    @property
    def usual(self) -> Proposal | Passed:
        """What an opportunity without floor, of the default source, is told; at the median."""
        return self._sold(self.answer, Sale(self.terms.auction, "default", 0))

    def at(self, order: float) -> Proposal | Passed:
        """The price that a share `order` of the answers stays under; the price if all are alike."""
        return self._sold(self._valued_at(order), Sale(self.terms.auction, "default", 0))

    def _sold(self, valued: Proposal | Passed, sale: Sale) -> Proposal | Passed:
        """From the value to the bid; a price that nobody thinks is the value is not shaded."""
        if isinstance(valued, Passed) or self.law is not None:
            return valued
        # What is bid for a second price decides only whether it is won: the value is the price.
        if sale.auction == SECOND:
            return valued
        if sale.auction == FIRST and not METHODS[self.terms.method].learns:
            return valued
        value = valued.price if valued.value is None else valued.value
        price = min(OF_SALE[sale.auction](value, sale, self.terms.cap, self.market), self.terms.cap)
        cut = valued.set_by != BY_CAP or price == self.terms.cap
        return Proposal(price, valued.set_by if cut else BY_VALUE, value)

    def _valued(self, opportunity: Opportunity, generator: Generator) -> Proposal | Passed:
        if self.law is not None:
            return Proposal(self.law.draw(generator), BY_VALUE)
        if self.valuing is not None and isinstance(self.answer, Proposal):
            own = self.valuing.value(opportunity)
            if own is not None:
                most = None if self.most is None else own.mean
                return _proposal(self._held_back(own.value), most, self.terms, self.hold)
        if not self.draws:
            return self.answer
        draw, counts, terms = METHODS[self.terms.method].draw, self.counts, self.terms
        if draw is None or counts is None or isinstance(self.answer, Passed):
            return self.answer
        value = float(draw(counts, terms, generator))
        return _proposal(self._held_back(value), self.most, self.terms, self.hold)

    def _held_back(self, value: float) -> float | None:
        """What budget and return target leave of a value; as it is where nothing brakes."""
        if self.hold.set_by is None:
            return value if math.isfinite(value) and value >= 0.0 else None
        return _bid(lambda: self.hold.bid(np.asarray(value)), self.terms)

    def _valued_at(self, order: float) -> Proposal | Passed:
        if self.law is not None:
            return Proposal(self.law.quantile(order), BY_VALUE)
        quantile, counts, terms = METHODS[self.terms.method].quantile, self.counts, self.terms
        if not self.draws or quantile is None or counts is None:
            return self.answer
        return self._priced(lambda: quantile(counts, terms, order))

    def _priced(self, offer: Offer) -> Proposal | Passed:
        bid = _bid(lambda: self.hold.bid(offer()), self.terms)
        return _proposal(bid, self.most, self.terms, self.hold)


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
    try:
        hold = brakes.brakes_of(memory, counts, guided)
        valuing = valuing_of(memory, guided)
    except UnreadableMemory:
        # Learnt under another target or in other dimensions; a refold is on its way.
        return Ready(memory, guided, counts, most, Passed(LEARNER_HALTED), draws=False)
    bid = _bid(lambda: hold.bid(method.index(counts, guided)), guided)
    answer = _proposal(bid, most, guided, hold)
    market = market_of(memory, guided, answer.price if isinstance(answer, Proposal) else 0.0)
    draws = method.draw is not None
    return Ready(
        *(memory, guided, counts, most, answer, draws), market=market, valuing=valuing, hold=hold
    )


def _by_law(memory: Memory, terms: Terms, tree: exptree_rules.Rules, counts: Counts) -> Ready:
    try:
        law = law_of(memory.tree, tree)
    except UnreadableTree:
        # Grown under a cap or ceiling of before; a refold is on its way.
        return Ready(memory, terms, counts, None, Passed(LEARNER_HALTED), draws=False)
    median = Proposal(law.quantile(0.5), BY_VALUE)
    return Ready(memory, terms, counts, None, median, draws=True, law=law)


def _proposal(
    bid: float | None, most: float | None, terms: Terms, hold: brakes.Brakes
) -> Proposal | Passed:
    if bid is None:
        return Passed(LEARNER_HALTED)
    set_by = hold.set_by or BY_VALUE
    if most is not None and bid > most:
        bid, set_by = most, BY_ALLOWANCE
    if bid >= terms.cap:
        return Proposal(terms.cap, BY_CAP if bid > terms.cap else set_by, math.floor(bid))
    return Proposal(math.floor(bid), set_by)


def _counts(memory: Memory, terms: Terms) -> Counts | None:
    # A sum too large for a float must not become a price.
    try:
        with np.errstate(all="ignore"):
            counts = Counts.of(memory, terms)
    except OverflowError:
        return None
    return counts if all(map(math.isfinite, counts.all)) else None


def _bid(offer: Offer, terms: Terms) -> float | None:
    # Nor must a formula outside its range.
    with np.errstate(all="ignore"):
        bid = float(offer())
    return bid if math.isfinite(bid) and bid >= 0.0 else None
