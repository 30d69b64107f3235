"""What may hold a bid back although its price is good, apart from how the price was made."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from service.decision import posterior
from service.decision.counts import Counts
from service.decision.terms import Terms
from service.learner import pacing, return_part, return_target
from service.learner.bounds import Numbers
from service.learner.memory import Memory
from service.learner.pace_part import Pacing
from service.learner.parts import PACE, RETURN
from service.learner.rules import ONCE
from service.learner.tally import Tally

WAITING_MIN = 50
WAITING_PER_KNOWN = 2
BY_PACING, BY_RETURN = "pacing", "return_target"
OPEN_BIDS = 100  # So many bids may be open at once on one snapshot before slack is spent twice.
EARNS_BACK = 2  # Below its target, a strict line item pays at most this part of what it may.


def no_value(tally: Tally, terms: Terms) -> bool:
    """
    Whether too many wins still await their first word on value to go on buying.

    Only where each win gets one value: more than max(50, 2 x values known) wins without a
    value look like a feed that is silent. A brake without a theorem.
    """
    if terms.arrival != ONCE:
        return False
    # A restart forgets values, which says nothing of the feed; the reports it had still count.
    told = max(tally.known, tally.values_seen)
    return tally.wins - told > max(WAITING_MIN, WAITING_PER_KNOWN * told)


def learning_cost(tally: Tally, counts: Counts, terms: Terms) -> float:
    """
    What was paid less what it is worth at the posterior mean, in nanos; below 0 is a gain.

    An estimate: the impressions bought are all valued at what is believed of one now.
    """
    return tally.paid - tally.wins * float(posterior.mean(counts, terms))


def allowance_bid(tally: Tally, counts: Counts, terms: Terms) -> float | None:
    """
    The most that may be bid once learning has cost more than its allowance, else None.

    That is the posterior mean: nothing is then paid for the sake of knowing more. A brake
    without a theorem; while it holds, no published guarantee of the method does. It lets go
    by itself when the bids at the mean have earned the loss back.
    """
    if terms.allowance is None or learning_cost(tally, counts, terms) <= terms.allowance:
        return None
    return float(posterior.mean(counts, terms))


@dataclass(frozen=True, slots=True)
class Brakes:
    """
    What budget and return target make of a value, alike for every bid on one snapshot.

    No theorem covers values that are learnt, a budget, a return target and late outcomes
    together: pacing is proved for values that are known before the bid and prices that are told
    after it (Balseiro, Gur, Management Science 65(9), 2019), the return target likewise (Feng,
    Padmanabhan, Wang, WWW 2023).

    Args:
        mu: Multiplier of the budget, in units of 2^-40; 0 where it does not bind.
        target: The return target; None for none.
        lift: Multiplier lambda of the target.
        most: The most that the strict form lets be bid, in nanos; None for no limit.
    """

    mu: int = 0
    target: return_target.Rules | None = None
    lift: float = 1.0
    most: int | None = None

    @property
    def set_by(self) -> str | None:
        """What moves the price away from the value; None where nothing does."""
        if self.target is not None:
            return BY_RETURN
        return BY_PACING if self.mu else None

    def bid(self, value: Numbers) -> Numbers:
        """
        What may be bid now for a value per impression, elementwise, before the auction's rule.

        value / (1 + mu), or value (1 + lambda / tau) / (lambda + mu) under a target tau; cut by
        the strict form. In a first-price auction it is the value to be shaded.
        """
        if self.target is None:
            return pacing.paced(value, self.mu) if self.mu else value
        wanted = return_target.bid(value, self.lift, self.mu, self.target)
        return wanted if self.most is None else np.minimum(wanted, float(self.most))


NO_BRAKES = Brakes()


def brakes_of(memory: Memory, counts: Counts, terms: Terms) -> Brakes:
    """
    The brakes of a snapshot, from the parts of its memory.

    Raises:
        UnreadableMemory: A part is damaged, or of another target: a refold is on its way.
    """
    # A part that was kept from before pacing was turned off must not go on pressing.
    mu = multiplier_of(memory) if terms.paced else 0
    target = terms.returning
    if target is None:
        return Brakes(mu)
    lift = return_part.read(memory.part(RETURN), target).multiplier
    most = _strict(memory.total, counts, terms, target) if terms.strict_return else None
    return Brakes(mu, target, lift, most)


def multiplier_of(memory: Memory) -> int:
    """Mu in units of 2^-40; 0 before the first lesson."""
    state = memory.part(PACE)
    return Pacing.from_bytes(state).multiplier if state else 0


def _strict(tally: Tally, counts: Counts, terms: Terms, target: return_target.Rules) -> int:
    """
    The most that keeps what is believed of all wins at the target, whatever is won next.

    Values come late, so what was bought counts at the posterior mean of now: the promise is
    kept for values that are what they are believed to be. Bids that are open at once share the
    slack, each its part of it; below the target every win must earn back.
    """
    # A mean beyond all amounts is no mean: nothing may be bid on it.
    believed = float(posterior.mean(counts, terms))
    mean = int(believed) if believed <= terms.ceiling else 0
    slack = target.worth(tally.wins * mean) - tally.paid
    if slack < 0:
        mean, slack = mean // EARNS_BACK, 0
    # The wish is boundless here, so that what comes back is the limit alone.
    return return_target.strict_bid(2**62, mean, slack // OPEN_BIDS, 0, target)
