"""The multiplier that holds value per unit spent to a target, apart from how values are guessed.

Feng, Padmanabhan, Wang, "Online Bidding Algorithms for Return-on-Spend Constrained Advertisers",
WWW 2023: bid v (1 + lambda / tau) / (lambda + mu), and after each round lambda falls by the
factor exp(-step x (value / tau - paid)). On average over many rounds that meets the target to
about the root of them, and may dip below it on the way; the strict form never dips below,
bidding at most what the surplus so far can cover. The literature is in tension here: regret
near the root of the rounds with the target always kept is announced for one model (Feng and
others), and shown impossible for every method in another (Vaze, Sinha, arXiv 2502.05599, 2025),
so the strict form promises the target and nothing about what it earns.
"""

from __future__ import annotations

import math
import struct
from dataclasses import dataclass

from numpy.typing import ArrayLike

from service.learner.arrays import Numbers, double
from service.learner.pacing import UNITS
from service.learner.sealed import sealed, unsealed

FORM = 1
MILLION = 10**6
LEVEL_MAX = 16 * UNITS  # A lambda of e^16 bids value / target to seven digits.
# Below e^-7 the bid is a thousand times the value and more: the cap sets it either way, and a
# lambda lower still would only take longer to come back.
LEVEL_MIN = -7 * UNITS

# name, form, target, step, scale, level, valued, paid
_STATE = struct.Struct(">3sBQQQqQQ")
_NAME = b"rtn"


class UnreadableReturn(ValueError):
    """The bytes are not a return of the form we write, or of other rules."""


@dataclass(frozen=True, slots=True)
class Rules:
    """
    What is held and how fast.

    Args:
        target: The least value per unit spent (tau), in millionths: 2.5 is 2,500,000.
        step: How far one scale of shortfall moves ln lambda, in units of 2^-40; as published
            1 / sqrt(rounds).
        scale: Money that counts as one, in nanos.
    """

    target: int
    step: int
    scale: int

    def worth(self, value: int) -> int:
        """What may be paid for so much value under the target, in nanos, rounded down."""
        return value * MILLION // self.target


@dataclass(frozen=True, slots=True)
class Return:
    """
    What was got and paid so far.

    Args:
        level: ln lambda in units of 2^-40; lambda starts at one.
        valued: Sum of values counted, in nanos.
        paid: Sum of prices paid, in nanos.
    """

    level: int = 0
    valued: int = 0
    paid: int = 0

    @property
    def multiplier(self) -> float:
        """Lambda."""
        return math.exp(self.level / UNITS)

    def slack(self, rules: Rules) -> int:
        """What more could be paid for the values so far, in nanos; below 0 the target is missed."""
        return rules.worth(self.valued) - self.paid

    def to_bytes(self, rules: Rules) -> bytes:
        """Equal returns of equal rules give equal bytes."""
        body = _STATE.pack(*_head(rules), self.level, self.valued, self.paid)
        return sealed(body)

    @staticmethod
    def from_bytes(state: bytes, rules: Rules) -> Return:
        """
        Read what `to_bytes` wrote under the same rules.

        Raises:
            UnreadableReturn: Another form, other rules, or not whole.
        """
        body, sound = unsealed(state)
        if len(body) != _STATE.size or body[:4] != _NAME + bytes([FORM]):
            raise UnreadableReturn("not the form of return this release writes")
        if not sound:
            raise UnreadableReturn("damaged")
        *head, level, valued, paid = _STATE.unpack(body)
        if tuple(head) != _head(rules):
            raise UnreadableReturn("a return of other rules")
        return Return(level, valued, paid)


def learn(before: Return, value: int, paid: int, rules: Rules) -> Return:
    """
    Count one entry: ln lambda - step x (value / target - paid) / scale.

    Args:
        before: So far.
        value: Nanos of value it adds, or takes off where one is corrected: the value itself
            when it comes, or at the win the mean that is learnt, where values come late.
        paid: Nanos it says were paid.
        rules: The target, and how lambda moves.
    """
    gained = rules.worth(value) - paid
    level = before.level - rules.step * gained // rules.scale
    return Return(
        min(max(level, LEVEL_MIN), LEVEL_MAX),
        max(before.valued + value, 0),
        before.paid + paid,
    )


def bid(value: ArrayLike, multiplier: float, budget_multiplier: int, rules: Rules) -> Numbers:
    """
    v (1 + lambda / tau) / (lambda + mu): the bid in second price, to be capped; elementwise.

    It wants value and not surplus: with lambda large it bids value / tau, and with lambda small
    and money left it bids anything. In first price it is the value to be shaded.

    Args:
        value: Value per impression.
        multiplier: Lambda, above 0.
        budget_multiplier: Mu of pacing, in units of 2^-40.
        rules: For the target.
    """
    weight = 1.0 + multiplier * MILLION / rules.target
    return double(double(value) * (weight / (multiplier + budget_multiplier / UNITS)))


def strict_bid(wanted: int, value: int, slack: int, held: int, rules: Rules) -> int:
    """
    The wanted bid, at most value / tau + slack: what is won for it leaves no shortfall.

    In whole nanos, so that no rounding breaks it. By construction, in any auction that charges
    at most the bid, and for values that are what they were said to be: what is guessed too high
    is not covered. A sure lower value (0 where values are chance) keeps the target whatever
    comes, and buys only from what was earned.

    Args:
        wanted: Bid without this.
        value: Value per impression that is sure.
        slack: `Return.slack`; below 0 it counts as it is, so that bids make up for it.
        held: Nanos that bids still open were given of the slack.
        rules: For the target.
    """
    return max(min(wanted, rules.worth(value) + slack - held), 0)


def _head(rules: Rules) -> tuple[bytes, int, int, int, int]:
    return _NAME, FORM, rules.target, rules.step, rules.scale
