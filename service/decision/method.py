"""What every value method is made of, so that a new method is one file and one line."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np

from service.decision.terms import Terms
from service.learner.bounds import Numbers
from service.learner.tally import Tally


@dataclass(frozen=True, slots=True)
class Counts:
    """
    The sums an index reads: one number each, or one array each over many runs.

    Args:
        rounds: Rounds played.
        known: Wins whose value is known.
        converted: Those worth more than nothing.
        amount: Sum of known values, in nanos.
    """

    rounds: Numbers
    known: Numbers
    converted: Numbers
    amount: Numbers

    @staticmethod
    def of(tally: Tally) -> Counts:
        """
        The counts of one tally.

        A correction that comes after a reset for a value from before it leaves a sum below
        zero; no index is defined there, so it counts as zero.
        """
        sums = (tally.rounds, tally.known, tally.converted, tally.amount)
        return Counts(*(np.asarray(max(one, 0), dtype=np.float64) for one in sums))

    @property
    def round_next(self) -> Numbers:
        """
        The round to be bid in, from 1.

        After a reset, values of earlier wins may come before any round; an index must not
        take them for more than one round each can explain.
        """
        return np.asarray(np.maximum(self.rounds, self.known) + 1.0, dtype=np.float64)

    def mean_share(self, terms: Terms) -> Numbers:
        """Mean of the known values as a share of the scale; 0 while none is known."""
        share = self.amount / (np.maximum(self.known, 1.0) * terms.scale)
        return np.asarray(np.minimum(share, 1.0), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class Setting:
    """
    One number a method takes; `low` and `high` are outside the range when `open_ended`.

    Args:
        default: Taken when nothing is said; None when it must be said.
        whole: Whether only integers are read.
    """

    default: float | None
    low: float
    high: float
    open_ended: bool = True
    whole: bool = False

    def fault(self, name: str, given: object) -> str | None:
        """What is wrong with a given number, in one sentence, or None."""
        kinds = (int,) if self.whole else (int, float)
        if isinstance(given, bool) or not isinstance(given, kinds) or not math.isfinite(given):
            return f"{name} must be {'an integer' if self.whole else 'a finite number'}."
        if self.low < given < self.high:
            return None
        if not self.open_ended and given in (self.low, self.high):
            return None
        edges = "between, but not at," if self.open_ended else "between"
        return f"{name} must lie {edges} {self.low:g} and {self.high:g}."


@dataclass(frozen=True, slots=True)
class Method:
    """
    A rule for what an impression is worth.

    Args:
        name: Its published name where it has one.
        index: Counts and terms to a value per impression in nanos, elementwise.
        source: Who published it, where.
        assumes: Under what it holds, in words.
        guarantee: Tally and terms to what is proved, in words, with its size in money.
        settings: The numbers it takes.
        learns: Whether it needs values; one that does not is never held back for them.
        takes_prior: Whether `typical` and `expected` move its price.
        needs_prior: Whether it has no price without the weight of at least a part of a
            conversion.
        published_bound: Whether it is an upper confidence index kept as published.
    """

    name: str
    index: Callable[[Counts, Terms], Numbers]
    source: str
    assumes: str
    guarantee: Callable[[Tally, Terms], str]
    settings: Mapping[str, Setting] = field(default_factory=dict)
    learns: bool = True
    takes_prior: bool = False
    needs_prior: bool = False
    published_bound: bool = False
