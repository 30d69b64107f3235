"""How one lesson moves log-weights, in whole units, apart from what has been learnt so far.

ExpTree: Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016,
Algorithm 2, with the doubling of Theorem 9. It must be told the competing bid of a loss.
The win-only variant needs nothing of a loss; it is our own derivation, not published.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from service.learner.exptree_bounds import UNITS, width_doublings
from service.learner.partition import Ticks

# How often the guesses of the number of rounds and of ln(1 / narrowest interval) doubled.
Stage = tuple[int, int]

FIRST: Stage = (0, 0)
DOUBLINGS_MAX = 62
CEILING_MAX = 2**64 - 1


class BadRules(ValueError):
    """No game can be played by such a ceiling or rate."""


@dataclass(frozen=True, slots=True)
class Rules:
    """
    The game one line item plays; money in nanos.

    A credit is a share of the scale: values reach the ceiling and prices the top, so it lies
    between -1 and 1. Every method below gives log-weight in units of 2^-40, rounded half to
    even from IEEE arithmetic, so it is the same on any machine.

    Args:
        ticks: The bids to choose from.
        ceiling: Largest value of one win; larger ones are cut.
        win_only: Whether nothing is learnt from a loss, and the top is bid now and then.
        rate: Learning rate, above 0 and up to 1, from a known number of rounds; None for
            doubling as nothing is known.

    Raises:
        BadRules: See there.
    """

    ticks: Ticks
    ceiling: int
    win_only: bool
    rate: float | None = None

    def __post_init__(self) -> None:
        if not 0 <= self.ceiling <= CEILING_MAX:
            raise BadRules("a ceiling must be at least 0 and fit eight bytes")
        if self.rate is not None and not 0.0 < self.rate <= 1.0:
            raise BadRules("a rate must be above 0 and at most 1")

    @property
    def scale(self) -> int:
        """What a difference of value and price is a share of."""
        return max(self.ticks.top, self.ceiling)

    def stage_due(self, rounds: int, narrowest: int) -> Stage:
        """
        The stage of the round after so many, with such a narrowest interval in cells.

        Theorem 9: both guesses start at 1, and one that is passed is doubled.
        """
        if self.rate is not None:
            return FIRST
        return rounds.bit_length(), width_doublings(narrowest / self.ticks.cells)

    def rate_at(self, stage: Stage) -> float:
        """
        The learning rate of a stage.

        Theorem 9: min{1, sqrt(D / B) / 2} for guesses B of rounds and D of ln(1/width). The
        win-only variant takes min{1, sqrt(D / (2B))}.
        """
        if self.rate is not None:
            return self.rate
        # D / (2B) or D / (4B) as a power of two, since both guesses are one.
        doublings_of_width = stage[1] - stage[0] - (1 if self.win_only else 2)
        return min(1.0, math.sqrt(math.ldexp(1.0, doublings_of_width)))

    def forced_at(self, stage: Stage) -> float:
        """The chance that the top is bid whatever was learnt; 0 as published."""
        return self.rate_at(stage) if self.win_only else 0.0

    def of_win(self, price: int, chance: float, stage: Stage) -> int:
        """
        What a win worth nothing credits to bids above its price.

        Algorithm 2 credits 1 - (1 - (v - m)) / P; the win-only variant (v - m) / P. Here
        v = 0, and `of_value` adds the rest, v / P.
        """
        paid = price / self.scale
        credit = -paid / chance if self.win_only else 1.0 - (1.0 + paid) / chance
        return round(self.rate_at(stage) * credit * UNITS)

    def of_value(self, amount: int, chance: float, stage: Stage) -> int:
        """What a value adds to the credit of its win."""
        share = min(amount, self.ceiling) / self.scale
        return round(self.rate_at(stage) * (share / chance) * UNITS)

    def of_loss(self, stage: Stage) -> int:
        """What a loss credits to bids above the competing bid: 1 in Algorithm 2."""
        return 0 if self.win_only else round(self.rate_at(stage) * UNITS)
