"""One multiplier that holds spend to its rate, apart from what the rate is and who bids by it.

Three published steps are one here: the level, a whole number, moves by step x (spent - due) /
scale and stays between two ends; the forms differ in what a level means. Entries come in the
order of the stream, so a late win is counted when it comes, against what is due by then, and a
fold is the same to the byte wherever it runs. Passes under the floor are rounds: what was due
for them is due, or a line item whose floor rose above its bids would never raise them.
"""

from __future__ import annotations

import math
import struct
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from service.learner.arrays import Numbers, double, doubles
from service.learner.sealed import sealed, unsealed

Form = Literal["euclidean", "entropy", "shifted"]

UNITS = 2**40  # One, in fixed point.
FORM = 1
FORMS: tuple[Form, ...] = ("euclidean", "entropy", "shifted")
# Of the shifted form: fast enough to mend a bad first multiplier within 10,000 rounds, and slow
# enough that what it swings by costs about half a per cent (both measured).
STEP = UNITS // 50
# The entropy form never reaches 0, and the lower it drifts the longer it takes to come back.
# Here the bid is within 1.6 % of the value.
ENTROPY_LEAST = UNITS // 64
TOP_MAX = 2**20 * UNITS
STEP_GROWTH = 8  # How much larger than the last step the first may be.
HALVINGS = 60
STEADY = 6
MEMORY_WINS = 256  # Wins that the mean price remembers.

# name, form, kind, step, scale, top, horizon, level, rounds, price
_STATE = struct.Struct(">3sBBQQQQqQQ")
_NAME = b"pac"


class UnreadablePace(ValueError):
    """The bytes are not a pace of the form we write, or of other rules."""


@dataclass(frozen=True, slots=True)
class Rules:
    """
    How a multiplier moves; multipliers and steps in units of 2^-40.

    Args:
        form: "euclidean": the level is the multiplier mu, which is adaptive pacing (Balseiro,
            Gur, "Learning in Repeated Auctions with Budgets", Management Science 65(9), 2019)
            and dual mirror descent. "entropy": it is ln mu, dual mirror descent with h = mu ln
            mu (Balseiro, Lu, Mirrokni, "The Best of Many Worlds", Operations Research 71(1),
            2023; ICML 2020). "shifted": it is ln(1 + mu), the same with 1 + mu in place of mu
            in h; it reaches 0, and a step moves every bid by the same factor. Here the scale
            follows the mean price of late wins, so that a pace comes to rest after about 1 / (2
            step) wins whatever prices are. This form and its scale are our own.
        step: How far one scale of money too much moves the level.
        scale: Money that counts as one, in nanos: the guess of a value, or a usual price. Of
            the shifted form it is the least.
        top: Largest multiplier.
        horizon: Rounds remembered by the step, which falls like the root of discounted rounds
            down to `step`; 0 for a step that stays the same.
    """

    form: Form
    step: int
    scale: int
    top: int = 2**10 * UNITS
    horizon: int = 0

    @property
    def ends(self) -> tuple[int, int]:
        """The least and the largest level."""
        return level_of(0, self), level_of(self.top, self)


@dataclass(frozen=True, slots=True)
class Seen:
    """
    What one entry of the stream says.

    Args:
        rounds: Rounds it ends: 1 for an outcome, more for a tick with its passes under the
            floor, 0 for a late win whose round a tick has counted.
        wins: Those of them that were won, or a late win.
        spent: Nanos paid for these.
    """

    rounds: int
    wins: int = 0
    spent: int = 0


@dataclass(frozen=True, slots=True)
class Pace:
    """
    Where the multiplier stands.

    Args:
        level: In units of 2^-40; what it means depends on the form.
        rounds: Rounds counted; discounted where the rules have a horizon.
        price: Mean price of the wins of late, in nanos; a guess at first.
    """

    level: int
    rounds: int = 0
    price: int = 0

    @staticmethod
    def fresh(rules: Rules, multiplier: int = 0, price: int = 0) -> Pace:
        """The pace before the first entry, at a guess of the multiplier and of a usual price."""
        return Pace(level_of(multiplier, rules), 0, price)

    def multiplier(self, rules: Rules) -> int:
        """The multiplier mu in units of 2^-40, for snapshot and bid."""
        if rules.form == "euclidean":
            return self.level
        if rules.form == "entropy":
            return round(math.exp(self.level / UNITS) * UNITS)
        return round(math.expm1(self.level / UNITS) * UNITS)

    def to_bytes(self, rules: Rules) -> bytes:
        """Equal paces of equal rules give equal bytes."""
        body = _STATE.pack(*_head(rules), self.level, self.rounds, self.price)
        return sealed(body)

    @staticmethod
    def from_bytes(state: bytes, rules: Rules) -> Pace:
        """
        Read what `to_bytes` wrote under the same rules.

        Raises:
            UnreadablePace: Another form, other rules, or not whole.
        """
        body, sound = unsealed(state)
        if len(body) != _STATE.size or body[:4] != _NAME + bytes([FORM]):
            raise UnreadablePace("not the form of pace this release writes")
        if not sound:
            raise UnreadablePace("damaged")
        *head, level, rounds, price = _STATE.unpack(body)
        if tuple(head) != _head(rules):
            raise UnreadablePace("a pace of other rules")
        return Pace(level, rounds, price)


def learn(pace: Pace, seen: Seen, due: int, rules: Rules, late: int = 0) -> Pace:
    """
    Count one entry: level + step x (spent - due) / scale, kept between the ends.

    A pace comes to rest in about scale / (2 step) of spend. Where that is less than what is
    spent before prices are known, it would correct the same error again and again and swing;
    the shifted form then takes three times that spend instead.

    Args:
        pace: So far.
        seen: What the entry says.
        due: Nanos that were to be spent in these rounds or this time; rate x rounds, or what
            a spend profile says.
        rules: How it moves.
        late: Nanos due at this time of day while a price is on its way.
    """
    counted = _counted(pace.rounds, seen.rounds, rules.horizon)
    price = (MEMORY_WINS * pace.price + seen.spent) // (MEMORY_WINS + seen.wins)
    step, scale = _step(counted, rules), rules.scale
    if rules.form == "shifted":
        # The mean price before this entry: one that holds its own prices shrinks dear entries,
        # and money runs out before the end.
        scale = max(scale, pace.price, STEADY * step * late >> 40)
    low, high = rules.ends
    moved = pace.level + step * (seen.spent - due) // scale
    return Pace(min(max(moved, low), high), counted, price)


def paced(value: ArrayLike, multiplier: int) -> Numbers:
    """
    value / (1 + mu): the bid in second price, and the value to be shaded in first price.

    Elementwise. In first price the best bid maximises (v - (1 + mu) b) F(b), which is shading
    the value v / (1 + mu).
    """
    return double(double(value) * (UNITS / (UNITS + multiplier)))


def within(bid: int, left: int) -> int:
    """The bid cut at the money left, so that a win can always be paid."""
    return min(bid, max(left, 0))


def first_by_curve(
    values: ArrayLike, prices: ArrayLike, chances: ArrayLike, rate: float, top: int = TOP_MAX
) -> int:
    """
    The multiplier at which a guessed market spends its rate, in units; 0 where it never would.

    Args:
        values: Equally likely values per impression, or one.
        prices: Possible competing bids.
        chances: Chance of each; what is missing to one is never won.
        rate: Money to be spent per round.
        top: Largest multiplier looked at, in units.
    """
    worth, rivals, weights = doubles(values, prices, chances)
    order = np.argsort(rivals, kind="stable")
    spend = np.append(0.0, np.cumsum(rivals[order] * weights[order]))

    def spends(multiplier: float) -> float:
        beaten = np.searchsorted(rivals[order], worth / (1.0 + multiplier), side="right")
        return float(np.mean(spend[beaten]))

    low, high = 0.0, top / UNITS
    if spends(low) <= rate:
        return 0
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if spends(middle) > rate else (low, middle)
    # The upper end, for there the market spends no more than the rate.
    return round(high * UNITS)


def first_by_forecast(unpaced: float, rate: float) -> int:
    """
    The multiplier from a forecast of what bidding the value would spend, in units.

    As if competing bids were uniform, where spend falls with the square of the bid.

    Args:
        unpaced: Money that would be spent per round, or in any one time.
        rate: Money to be spent in the same.
    """
    if unpaced <= rate:
        return 0
    return round(min(math.sqrt(unpaced / rate) - 1.0, TOP_MAX / UNITS) * UNITS)


def usual_price(value: float, multiplier: int) -> int:
    """A guess of the mean price paid, in nanos: half the bid, as where prices are uniform."""
    return int(float(paced(value, multiplier)) / 2.0)


def carried(pace: Pace, before: Rules, after: Rules) -> Pace:
    """The same multiplier under other rules, as after an edit of the line item."""
    return Pace(level_of(pace.multiplier(before), after), pace.rounds, pace.price)


def units(number: float) -> int:
    """A plain number in fixed point."""
    return round(number * UNITS)


def level_of(multiplier: int, rules: Rules) -> int:
    """The level of a multiplier in units, both cut at the ends."""
    cut = min(max(multiplier, 0), rules.top)
    if rules.form == "euclidean":
        return cut
    # A logarithm may differ in its last bit between machines; rounded to 2^-40 it does not.
    if rules.form == "entropy":
        return round(math.log(max(cut, ENTROPY_LEAST) / UNITS) * UNITS)
    return round(math.log1p(cut / UNITS) * UNITS)


def regret_bound(rounds: int, rate: float, step: float, first: float = 0.0) -> float:
    """
    C1 + C2 step T + C3 / step: what the euclidean form may lose to hindsight in T rounds.

    Balseiro, Lu, Mirrokni (2023), independent rounds, with values and prices at most one: C1 =
    1 / rate, C2 = (1 + rate)^2 / 2, C3 the larger of first^2 / 2 and (1 / rate - first)^2 / 2.
    The form is from memory of that paper.
    """
    return 1.0 / rate + _noise(rate) * step * rounds + _distance(rate, first) / step


def best_step(rounds: int, rate: float, first: float = 0.0) -> float:
    """The step with the least `regret_bound`; the papers' plain choice is 1 / sqrt(rounds)."""
    return math.sqrt(_distance(rate, first) / (_noise(rate) * rounds))


def _noise(rate: float) -> float:
    return (1.0 + rate) ** 2 / 2.0


def _distance(rate: float, first: float) -> float:
    return max(first**2, (1.0 / rate - first) ** 2) / 2.0


def _counted(before: int, rounds: int, horizon: int) -> int:
    if horizon == 0:
        return before + rounds
    # As if each round made all earlier ones count 1 / horizon less.
    return min(before + -(-rounds * max(horizon - before, 0) // horizon), horizon)


def _step(rounds: int, rules: Rules) -> int:
    if rules.horizon == 0:
        return rules.step
    # In whole numbers, so that a fold gives the same bytes on any machine.
    growth = math.isqrt(rules.horizon * UNITS // max(rounds, 1))  # In units of 2^-20.
    return rules.step * min(growth, STEP_GROWTH << 20) >> 20


def _head(rules: Rules) -> tuple[bytes, int, int, int, int, int, int]:
    kind = FORMS.index(rules.form)
    return _NAME, FORM, kind, rules.step, rules.scale, rules.top, rules.horizon
