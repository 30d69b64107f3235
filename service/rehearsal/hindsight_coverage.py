"""Invented logs whose truth is known, to see whether hindsight's intervals hold it.

Each log hides rivals and values the way a real one does: outcomes are censored, some windows
are open, some bids silent. The truth of an alternative is what it earns with nothing hidden.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.random import Generator

from service.rehearsal import hindsight_assumed, hindsight_drawn
from service.rehearsal.alternatives import Alternative
from service.rehearsal.auction_log import Logged
from service.rehearsal.hindsight_assumed import Worth
from service.rehearsal.hindsight_bounds import Purse, summed
from service.rehearsal.hindsight_rivals import rivals_alike

CEILING, CAP, TOP = 1_000_000, 900_000, 1_000_000
SHARE_MIN, SHARE_MAX = 0.2, 0.8


@dataclass(frozen=True, slots=True)
class Hidden:
    """
    One auction with nothing hidden; money in nanos.

    Args:
        told: What the log says of it.
        rival: Highest competing bid.
        value: What the impression brings.
        bid: What was really bid, or proposed and passed under the floor.
    """

    told: Logged
    rival: int
    value: int
    bid: int


@dataclass(frozen=True, slots=True)
class World:
    """
    The law of one log.

    Args:
        auction: "second" or "first".
        power: Rivals are below a share x of the top with chance x^power.
        mean: Mean value, where values do not depend on rivals.
        alike: Whether what labelled lines assume holds.
    """

    auction: str
    power: float
    mean: float
    alike: bool

    def share(self, price: int) -> float:
        """The chance that a price wins."""
        return float(min(1.0, price / TOP) ** self.power)

    def expected(self, price: int) -> float:
        """What a flat price earns per auction on average, in nanos."""
        share = min(1.0, price / TOP)
        wins = share**self.power
        if self.auction == "first":
            return float((self.mean - price) * wins)
        return float(self.mean * wins - self.power / (self.power + 1.0) * share * wins * TOP)


@dataclass(slots=True)
class Held:
    """How many intervals were looked at, and how many held the truth."""

    held: int = 0
    looked: int = 0

    def look(self, low: float, truth: float, high: float) -> None:
        """One interval and its truth; a nano of rounding is allowed for."""
        self.looked += 1
        self.held += low - 1 <= truth <= high + 1


def invented(rng: Generator, auctions: int, *, alike: bool) -> tuple[World, list[Hidden]]:
    """A world and a log of it; in half of the others, rivals and values depend on each other."""
    auction = ("second", "first")[int(rng.integers(2))]
    world = World(auction, float(rng.uniform(0.5, 2.0)), float(rng.uniform(0.1, 0.9)), alike)
    rivals = np.maximum(1, (TOP * rng.random(auctions) ** (1.0 / world.power)).astype(np.int64))
    chance = np.full(auctions, world.mean)
    if not alike:
        chance = np.where(rng.random() < 0.5, rivals / TOP, chance)
    values = np.where(rng.random(auctions) < chance, CEILING, 0)
    mean = replace(world, mean=world.mean * CEILING)
    bids = rng.integers(1, CAP, auctions, endpoint=True)
    floors = rng.integers(0, TOP // 3, auctions) * (not alike)
    priced = not alike and bool(rng.random() < 0.5)
    rows = zip(rivals.tolist(), values.tolist(), bids.tolist(), floors.tolist(), strict=True)
    return mean, [_hidden(mean, rng, *row, priced=priced) for row in rows]


def covered(seed: int, auctions: int = 200) -> dict[str, Held]:
    """One log of each kind: intervals without a model on both, labelled ones where they apply."""
    rng = np.random.default_rng(seed)
    found: dict[str, Held] = {}
    for alike in (False, True):
        world, log = invented(rng, auctions, alike=alike)
        _look_without_model(rng, log, found)
        if alike:
            _look_labelled(rng, world, log, found)
    _look_drawn(rng, auctions * 3, found)
    return found


def joined(all_found: Sequence[dict[str, Held]]) -> dict[str, Held]:
    """The counts of many logs together."""
    total: dict[str, Held] = {}
    for found in all_found:
        for name, one in found.items():
            sums = total.setdefault(name, Held())
            sums.held, sums.looked = sums.held + one.held, sums.looked + one.looked
    return total


def truth(log: Sequence[Hidden], other: Alternative, bids: Sequence[int], left: int) -> int:
    """What bids really earn on a log under a budget; bidding ends at what cannot be paid."""
    earned = 0
    for one, bid in zip(log, bids, strict=True):
        floor = other.price if other.kind == "floor" else one.told.floor
        if bid >= max(one.rival, floor, 1):
            cost = max(one.rival, floor) if one.told.auction == "second" else bid
            if cost > left:
                break
            left, earned = left - cost, earned + one.value - cost
    return earned


def _hidden(
    world: World, rng: Generator, rival: int, value: int, bid: int, floor: int, *, priced: bool
) -> Hidden:
    least, auction = max(rival, floor), world.auction
    told = {"floor": floor, "high": CEILING, "set_by": "cap" if bid == CAP else "value"}
    if bid < floor:
        row = Logged(auction, 0, "passed", reason="under_floor", floor=floor, high=CEILING)
    elif rng.random() < 0.05:
        row = Logged(auction, bid, "silent", **told)  # type: ignore[arg-type]
    elif bid < least:
        row = Logged(auction, bid, "lost", **told, least=least if priced else None)  # type: ignore[arg-type]
    else:
        price = least if auction == "second" else bid
        row = Logged(auction, bid, "won", **told, price=price)  # type: ignore[arg-type]
        if rng.random() < 0.9:
            row = replace(row, low=value, high=value)
    return Hidden(row, rival, value, bid)


def _look_without_model(rng: Generator, log: list[Hidden], found: dict[str, Held]) -> None:
    rows, proposed = [one.told for one in log], [one.bid for one in log]
    for kind in ("flat", "cap", "floor", "method"):
        price = int(rng.integers(1, CAP, endpoint=True))
        other = Alternative(kind, price, CAP)
        left = int(rng.integers(1, 2 * sum(bid for bid in proposed) // 3))
        bids = {
            "flat": [price] * len(log),
            "cap": [min(bid, price) for bid in proposed],
            "floor": proposed,
            "method": rng.integers(0, CAP, len(log), endpoint=True).tolist(),
        }[kind]
        for money in (left, 2**62):
            sums = summed(rows, other, Purse(money))
            held = found.setdefault(f"without a model, {kind}", Held())
            held.look(sums.low, truth(log, other, bids, money), sums.high)


def _look_labelled(rng: Generator, world: World, log: list[Hidden], found: dict[str, Held]) -> None:
    rows, price = [one.told for one in log], int(rng.integers(1, CAP))
    worth, other = Worth(CEILING, CAP, CEILING), Alternative("flat", price, CAP)
    line = hindsight_assumed.values_alike(rows, other, worth)
    known = [
        replace(one, value=one.told.low if one.told.low == one.told.high else round(world.mean))
        for one in log
    ]
    held = found.setdefault("values alike, 95 %", Held())
    held.look(line.low, truth(known, other, [price] * len(log), 2**62), line.high)
    joint = rivals_alike(rows, price, worth)
    if joint is not None:
        kind = "rivals alike, 95 %" if joint.level else "rivals alike, rough guide"
        expected = sum(_expected(one, world, price) for one in known)
        found.setdefault(kind, Held()).look(joint.low, expected, joint.high)


def _expected(one: Hidden, world: World, price: int) -> float:
    """What a flat price earns on average, given what was told of the auction."""
    row = one.told
    first = world.auction == "first"
    if row.result == "lost" and price > row.bid:
        beyond = world.expected(price) - world.expected(row.bid)
        if first:
            beyond = (world.mean - price) * (world.share(price) - world.share(row.bid))
        return beyond / (1.0 - world.share(row.bid))
    if row.result == "won" and first and price < row.bid:
        return (one.value - price) * world.share(price) / world.share(row.bid)
    return float(truth([one], Alternative("flat", price), [price], 2**62))


def _look_drawn(rng: Generator, auctions: int, found: dict[str, Held]) -> None:
    """A control arm at one price against bids drawn evenly: its mean on all traffic is known."""
    world, log = invented(rng, auctions, alike=True)
    share, price = float(rng.uniform(SHARE_MIN, SHARE_MAX)), int(rng.integers(TOP // 5, CAP))
    rows = []
    for one in log:
        mine = rng.random() < share
        hidden = _hidden(
            world, rng, one.rival, one.value, price if mine else one.bid, 0, priced=False
        )
        arm, odds = ("control", share) if mine else ("", 1.0 - share)
        row = replace(hidden.told, arm=arm, arm_odds=odds)
        rows.append(replace(row, low=one.value, high=one.value) if row.result == "won" else row)
    answer = hindsight_drawn.estimates(rows, price)
    if not isinstance(answer, hindsight_drawn.Refused):
        for name, estimate in answer.items():
            low, high = estimate.limits
            held = found.setdefault(f"{name} of a control arm, 95 %", Held())
            held.look(low, world.expected(price), high)
