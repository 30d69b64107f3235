"""What every value method is made of, so that a new method is one file and one line."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

from numpy.random import Generator

from service.decision.counts import Counts as Counts
from service.decision.terms import Terms
from service.learner.bounds import Numbers
from service.learner.tally import Tally


@dataclass(frozen=True, slots=True)
class Setting:
    """
    One number a method takes; `low` and `high` are outside the range when `open_ended`.

    Args:
        default: Taken when nothing is said; None when it must be said.
        whole: Whether only integers are read.
        choices: The only numbers it may be; none for all in the range.
    """

    default: float | None
    low: float
    high: float
    open_ended: bool = True
    whole: bool = False
    choices: tuple[int, ...] = ()

    def fault(self, name: str, given: object) -> str | None:
        """What is wrong with a given number, in one sentence, or None."""
        kinds = (int,) if self.whole else (int, float)
        if isinstance(given, bool) or not isinstance(given, kinds) or not math.isfinite(given):
            return f"{name} must be {'an integer' if self.whole else 'a finite number'}."
        if self.choices:
            said = ", ".join(str(choice) for choice in self.choices)
            return None if given in self.choices else f"{name} must be one of: {said}."
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
        needs_priced_losses: Whether it must be told the competing bid of every loss.
        by_law: Whether it draws from a law that outcomes move, in place of a value.
        by_features: Whether it reads what is known of each impression; `index` is then the value
            of one of which nothing is known.
        draw: For a method that draws its value afresh for every bid; `index` is then the median.
        quantile: The value below which a share of its draws lies, for methods that draw.
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
    needs_priced_losses: bool = False
    by_law: bool = False
    by_features: bool = False
    draw: Callable[[Counts, Terms, Generator], Numbers] | None = None
    quantile: Callable[[Counts, Terms, float], Numbers] | None = None
