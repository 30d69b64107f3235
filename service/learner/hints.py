"""How much the caller's own predictions of value are worth, by one ratio, apart from bidding.

A hint says what an impression is worth in the caller's view. How hints compare is the caller's
knowledge; how high they lie is learnt here: values over hints, one ratio for all. Both sums run
over the impressions whose value is known, so that hints on their way do not pull it down.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from service.learner.arrays import Numbers, double
from service.learner.bounds import gamma_quantile
from service.learner.sealed import sealed, unsealed

FORM = 1

# name, form, impressions, hinted, amount, square of amounts
_STATE = struct.Struct(">3sBQ16s16s16s")
_NAME = b"hnt"


class UnreadableHints(ValueError):
    """The bytes are not hints of the form we write."""


@dataclass(frozen=True, slots=True)
class Hints:
    """
    Sums over impressions with a hint and a known value; equal in any order.

    Args:
        impressions: Their number.
        hinted: Sum of hints in nanos; a part of one counts where its value had part of its time.
        amount: Sum of values in nanos.
        amount_square: Sum of their squares, in square nanos.
    """

    impressions: int = 0
    hinted: int = 0
    amount: int = 0
    amount_square: int = 0

    def to_bytes(self) -> bytes:
        """Equal sums give equal bytes."""
        sums = (self.hinted, self.amount, self.amount_square)
        wide = (one.to_bytes(16, signed=True) for one in sums)
        body = _STATE.pack(_NAME, FORM, self.impressions, *wide)
        return sealed(body)

    @staticmethod
    def from_bytes(state: bytes) -> Hints:
        """
        Read what `to_bytes` wrote.

        Raises:
            UnreadableHints: Another form, or not whole.
        """
        body, sound = unsealed(state)
        if len(body) != _STATE.size or body[:4] != _NAME + bytes([FORM]):
            raise UnreadableHints("not the form of hints this release writes")
        if not sound:
            raise UnreadableHints("damaged")
        _, _, impressions, *wide = _STATE.unpack(body)
        return Hints(impressions, *(int.from_bytes(one, signed=True) for one in wide))


@dataclass(frozen=True, slots=True)
class Prior:
    """
    What is believed of hints before any value comes.

    Args:
        typical: Usual value of one event, in nanos.
        events: Events the belief is worth, above 0; one by default, as for every guess.
        ratio: Value per hint that is believed: 1 says the hints are right.
    """

    typical: int
    events: float = 1.0
    ratio: float = 1.0


def learn(hints: Hints, hint: int, value: int) -> Hints:
    """
    Count an impression whose value is known.

    Args:
        hints: So far.
        hint: What was predicted, in nanos.
        value: What it was worth, cut at the ceiling, in nanos; usually nothing.
    """
    return correct(Hints(hints.impressions + 1, hints.hinted + hint, *_sums(hints)), 0, value)


def correct(hints: Hints, before: int, after: int) -> Hints:
    """Put another value, in nanos, in place of one that was counted."""
    return Hints(
        hints.impressions,
        hints.hinted,
        hints.amount + after - before,
        hints.amount_square + after * after - before * before,
    )


def ratio(hints: Hints, prior: Prior) -> float:
    """The mean of value per hint after what was seen."""
    shape, rate = posterior(hints, prior)
    return shape / rate


def ratio_quantile(hints: Hints, prior: Prior, order: float) -> float:
    """The value per hint that the truth lies under with this chance."""
    shape, rate = posterior(hints, prior)
    return float(gamma_quantile(shape, rate, order))


def posterior(hints: Hints, prior: Prior) -> tuple[float, float]:
    """
    Shape and rate of the Gamma distribution of value per hint.

    Events come by chance at a rate of ratio x hint / event, and a Gamma prior of the ratio
    stays Gamma. How much one event is worth, the size e, is the sum of squares over the sum of
    values, so that few large values count as little as they say; then shape = k + values / e
    and rate = k / ratio + hints / e, with k events of prior, of `typical` each.
    """
    amount, square = float(max(hints.amount, 0)), float(max(hints.amount_square, 0))
    guessed = prior.events * prior.typical
    size = (guessed * prior.typical + square) / (guessed + amount)
    shape = prior.events + amount / size
    return shape, prior.events / prior.ratio + float(max(hints.hinted, 0)) / size


def calibrated(hint: ArrayLike, of_ratio: float) -> Numbers:
    """The value per impression a hint stands for, never below 0; elementwise."""
    return double(np.maximum(double(hint), 0.0) * of_ratio)


def _sums(hints: Hints) -> tuple[int, int]:
    return hints.amount, hints.amount_square
