"""What one opportunity is worth by what is said of it: its features, or the caller's own hint.

Everything that does not depend on the opportunity is worked out once per snapshot.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from service.decision import posterior
from service.decision.counts import delay_mean_ms, exposure
from service.decision.opportunity import Opportunity
from service.decision.terms import Terms
from service.decision.value.linear import DELTA, LENGTH, NOISE, PENALTY
from service.learner import delay, hashing, hints, linear
from service.learner.hint_part import Book
from service.learner.hints import Hints
from service.learner.linear_part import Sums
from service.learner.memory import Memory
from service.learner.rules import ACCRUES


class Valued(NamedTuple):
    """What an impression is worth to the bidder, and by the estimate alone; nanos."""

    value: float
    mean: float


@dataclass(frozen=True, slots=True)
class ByFeatures:
    """
    The ridge of a snapshot, ready to price by.

    Args:
        weights: Estimate of the weights, in ceilings.
        inverse: Of the matrix of the ellipsoid, row by row; symmetric.
        radius: How far the true weights may be from the estimate, in its norm.
        lessons: Impressions behind it.
        scale: Nanos of one ceiling.
    """

    weights: list[float]
    inverse: list[list[float]]
    radius: float
    lessons: int
    scale: float

    @staticmethod
    def of(memory: Memory, terms: Terms) -> ByFeatures:
        """
        The ridge of what is learnt.

        Raises:
            UnreadableMemory: Learnt in another number of dimensions, or damaged.
        """
        sums = Sums.from_bytes(memory.part("linear"), int(terms.settings["dimensions"]))
        ridge = sums.ridge(PENALTY, terms.scale, _arrived(memory, terms))
        radius = linear.ellipsoid_radius(ridge.log_det, PENALTY, NOISE, LENGTH, DELTA)
        known = ridge.weights.tolist(), ridge.inverse.tolist()
        return ByFeatures(*known, float(radius), ridge.lessons, terms.scale)

    def value(self, hashed: hashing.Hashed) -> Valued | None:
        """Mean plus radius times width; None where features cancel out, and so say nothing."""
        mean = square = 0.0
        before = list[tuple[int, int]]()
        # Few places are not nought: their sums cost less than products of whole matrices.
        for place, parts in hashing.folded(hashed, len(self.weights)).items():
            row = self.inverse[place]
            # Every pair once and twice as much, for the matrix is symmetric.
            crossed = 0.0
            for other, by in before:
                crossed += row[other] * by
            square += parts * (row[place] * parts + 2.0 * crossed)
            mean += self.weights[place] * parts
            before.append((place, parts))
        # Features that share a dimension with opposite signs may leave a vector of nothing.
        if square <= 0.0:
            return None
        unit = self.scale / hashing.PARTS
        return Valued(
            # A ridge knows no bounds, but no impression is worth less than nothing.
            max(mean + self.radius * math.sqrt(square), 0.0) * unit,
            max(mean, 0.0) * unit,
        )


@dataclass(frozen=True, slots=True)
class ByHint:
    """
    The ratio of value to hint on a snapshot.

    Args:
        seen: What it was learnt from.
        ratio: What hints are multiplied by.
        mean: The ratio that is believed.
    """

    seen: Hints
    ratio: float
    mean: float

    @staticmethod
    def of(memory: Memory, terms: Terms) -> ByHint:
        """The ratio of what is learnt: its quantile where the method bids one, else its mean."""
        book = Book.from_bytes(memory.part("hints"))
        seen = book.counted(_shares(book, memory, terms))
        # Without any weight of the guess a ratio of no hints would be nought over nought.
        prior = hints.Prior(terms.typical, max(terms.prior_conversions, posterior.LEAST))
        mean = hints.ratio(seen, prior)
        order = terms.settings.get("order")
        ratio = mean if order is None else hints.ratio_quantile(seen, prior, order)
        return ByHint(seen, ratio, mean)


def _arrived(memory: Memory, terms: Terms) -> float:
    """How much of all values of what was bought can have come by now, by the delay law."""
    if terms.arrival != ACCRUES:
        return 1.0
    closed, still_open = memory.cells[: memory.closed], memory.cells[memory.closed :]
    bought = memory.base.known + sum(cell.known for cell in closed)
    bought += sum(cell.bought for cell in still_open)
    return float(exposure(memory, terms).sum()) / bought if bought > 0 else 1.0


def _shares(book: Book, memory: Memory, terms: Terms) -> list[float]:
    if not book.cells:
        return []
    starts = np.asarray([float(cell.start_ms) for cell in book.cells])
    ends = np.append(starts[1:], float(memory.clock_ms))
    ages = memory.clock_ms - (starts + np.maximum(ends, starts)) / 2.0
    mean_ms = delay_mean_ms(memory, terms)
    shares: list[float] = delay.arrived_share(ages, mean_ms, terms.window_ms).tolist()
    return shares


@dataclass(frozen=True, slots=True)
class Valuing:
    """What a snapshot says of single opportunities; a hint comes before features."""

    by_features: ByFeatures | None = None
    by_hint: ByHint | None = None

    def value(self, opportunity: Opportunity) -> Valued | None:
        """What this one is worth; None where only what all are worth is known."""
        hint = opportunity.value_hint
        # Whoever sends a hint has seen more of this impression than its features say.
        if self.by_hint is not None and hint is not None:
            return Valued(hint * self.by_hint.ratio, hint * self.by_hint.mean)
        return self.by_features.value(opportunity.hashed) if self.by_features is not None else None


def valuing_of(memory: Memory, terms: Terms) -> Valuing | None:
    """
    What a snapshot says of single opportunities; None where all are alike.

    Raises:
        UnreadableMemory: See `ByFeatures.of`.
    """
    by_features = ByFeatures.of(memory, terms) if "dimensions" in terms.settings else None
    by_hint = ByHint.of(memory, terms) if terms.hints else None
    return Valuing(by_features, by_hint) if by_features or by_hint else None
