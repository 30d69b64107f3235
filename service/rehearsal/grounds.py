"""The markets that a rehearsal may name, drawn auction by auction before anybody bids.

Markets that answer to bids stand apart: the seller that learns in `seller`, other learners
in `ring`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.learner.arrays import Numbers, double
from service.rehearsal.laws import bids_of, values_of
from service.rehearsal.market import Nanos
from service.rehearsal.player import Auction

Said = Mapping[str, Any]


class Drawn(NamedTuple):
    """Competing bids, values and mean values of a sequence of auctions, in nanos."""

    competing: Nanos
    values: Nanos
    worth: Nanos


class Ground(NamedTuple):
    """A drawn sequence of auctions in columns; see `Auction` for what each is."""

    at_ms: Nanos
    least: Nanos
    values: Nanos
    worth: Nanos
    floor: int
    hints: Nanos | None
    value_delays_ms: list[int]
    told_delays_ms: list[int | None]

    def auctions(self) -> list[Auction]:
        """The same one by one, for policies that go the way of production."""
        rounds = self.least.size
        columns = (
            *(one.tolist() for one in (self.at_ms, self.least, self.values, self.worth)),
            [None] * rounds if self.hints is None else self.hints.tolist(),
            self.value_delays_ms,
            self.told_delays_ms,
        )
        return [
            Auction(at, least, value, worth, self.floor, "rehearsal", hint, (), late, told)
            for at, least, value, worth, hint, late, told in zip(*columns, strict=True)
        ]


def ground(market: Said, rng: Generator, rounds: int) -> Ground:
    """Draw so many auctions of a market."""
    found = GROUNDS[market["kind"]](market, rng, rounds)
    floor = int(market["floor"])
    return Ground(
        moments(market, rounds),
        np.maximum(found.competing, floor),
        found.values,
        found.worth,
        floor,
        found.values if known_before(market) else None,
        delays(market["value_delay_mean_ms"], rng, rounds),
        told(market, rng, rounds),
    )


def moments(market: Said, rounds: int) -> Nanos:
    """When auctions come: evenly over the span, in milliseconds."""
    # None at either end: a flight that is just beginning or over would take no bid.
    at_ms = np.arange(1, rounds + 1, dtype=np.int64) * int(market["span_ms"]) // (rounds + 1)
    return np.asarray(at_ms, dtype=np.int64)


def known_before(market: Said) -> bool:
    """Whether bidders know the value of each impression before they bid."""
    return bool(market["values"]["law"] == "even")


def is_at_once(market: Said) -> bool:
    """Whether outcomes and values are told before the next snapshot, and all of them."""
    late = market["value_delay_mean_ms"], market["outcome_delay_ms"], market["lost_share"]
    return not any(late)


def mean_worth(market: Said) -> int:
    """The mean value of an impression at the start, in nanos."""
    return round(values_of(market["values"]).mean)


def _iid(market: Said, rng: Generator, rounds: int) -> Drawn:
    values = values_of(market["values"])
    competing, worth = bids_of(market["rivals"]).draw(rng, rounds), values.draw(rng, rounds)
    if known_before(market):
        return Drawn(competing, worth, worth)
    return Drawn(competing, worth, np.full(rounds, round(values.mean), dtype=np.int64))


def _moving(course: Callable[[float, int], Numbers]) -> Callable[[Said, Generator, int], Drawn]:
    """A market whose values come less or more often by a factor that changes on the way."""

    def draw(market: Said, rng: Generator, rounds: int) -> Drawn:
        factor = course(float(market["change"]), rounds)
        most = float(factor.max())
        # A chance above 1 is certain and no more, so a change may be cut short by it.
        # Drawn at the highest rate and thinned, so that amounts keep their law.
        raised = {**market["values"], "chance": min(market["values"]["chance"] * most, 1.0)}
        full, rate = values_of(raised), double(factor / most)
        values = np.where(rng.random(rounds) < rate, full.draw(rng, rounds), 0)
        competing = bids_of(market["rivals"]).draw(rng, rounds)
        return Drawn(competing, values, np.rint(full.mean * rate).astype(np.int64))

    return draw


def _swing(change: float, rounds: int) -> Numbers:
    turn = 2.0 * math.pi * np.arange(rounds) / max(rounds, 1)
    return double((1.0 + change) / 2.0 + (1.0 - change) / 2.0 * np.cos(turn))


def _jump(change: float, rounds: int) -> Numbers:
    return double(np.where(np.arange(rounds) < rounds // 2, 1.0, change))


def _coin_flip(market: Said, rng: Generator, rounds: int) -> Drawn:
    """
    Two prices close to one another; only what is sold at the lower one has a value.

    The adversary that defeats every fixed grid of bids (Weed, Perchet, Rigollet, "Online
    learning in repeated auctions", COLT 2016, Proposition 11).
    """
    amount = int(market["values"]["amount"])
    low, high = ((0.5 + part * market["gap"]) * amount for part in (0.5, 1.5))
    # One coin for both price and value: that what is dear is worthless is the trap.
    good: NDArray[np.bool_] = rng.random(rounds) < 0.5
    competing = np.where(good, math.ceil(low), math.ceil(high)).astype(np.int64)
    values = np.where(good, amount, 0).astype(np.int64)
    return Drawn(competing, values, values)


def _above_value(market: Said, rng: Generator, rounds: int) -> Drawn:
    """
    One price just above the mean value, which nobody should pay and only learning can tell.

    The distance is sqrt(6 ln T / T) of an event's amount, where both terms of UCBid's bound
    agree (Weed, Perchet, Rigollet, COLT 2016, Theorem 1), the worst for it.
    """
    values = values_of(market["values"])
    gap = math.sqrt(6.0 * math.log(max(rounds, 2)) / rounds) * market["values"]["amount"]
    competing = np.full(rounds, math.ceil(values.mean + gap), dtype=np.int64)
    worth = np.full(rounds, round(values.mean), dtype=np.int64)
    return Drawn(competing, values.draw(rng, rounds), worth)


GROUNDS: dict[str, Callable[[Said, Generator, int], Drawn]] = {
    "iid": _iid,
    "own_curve": _iid,
    "drift": _moving(_swing),
    "abrupt": _moving(_jump),
    "coin_flip": _coin_flip,
    "above_value": _above_value,
}


def delays(mean_ms: int, rng: Generator, rounds: int) -> list[int]:
    """How late each value comes, in milliseconds."""
    if not mean_ms:
        return [0] * rounds
    # Rounded up, for no value comes at the very moment of its win here.
    late: list[int] = np.ceil(rng.exponential(mean_ms, rounds)).astype(np.int64).tolist()
    return late


def told(market: Said, rng: Generator, rounds: int) -> list[int | None]:
    """How late each outcome is told, in milliseconds; None for never."""
    # Chance is drawn only where it is needed, so that adding one kind of lateness moves no other.
    delay_ms, lost_share = int(market["outcome_delay_ms"]), float(market["lost_share"])
    if not lost_share:
        return [delay_ms] * rounds
    lost = (rng.random(rounds) < lost_share).tolist()
    return [None if one else delay_ms for one in lost]
