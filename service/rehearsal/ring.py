"""Several policies in the same auctions, budgets and all, bidding against one another.

Each is a line item that bids by the code of production, so what one of them learns changes what
the others meet. No theorem says that such learners settle; the figures say whether they did.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.random import Generator

from service.learner import shading
from service.learner.arrays import Numbers
from service.rehearsal.grounds import delays, known_before, moments, told
from service.rehearsal.laws import bids_of, values_of
from service.rehearsal.market import Nanos
from service.rehearsal.player import Auction, Player, Stage
from service.rehearsal.seller import LearningSeller
from service.rehearsal.taken import PASSED

Said = Mapping[str, Any]

WINDOWS = 20
SETTLED_WITHIN = 0.05  # Of its last mean bid, for every bidder in every later window.
LUCK = 3.0  # Standard errors.
SETTLED_BY = 16  # Of the windows; later than that is no settling.


@dataclass(frozen=True, slots=True)
class Played:
    """
    What one arena came to; money in nanos, one row per auction, one column per bidder.

    Args:
        values: What each impression was worth to each.
        bids: 0 for a pass.
        revenue: What the seller was paid for each.
        floors: The least the seller took.
        players: The bidders, with all they did.
    """

    values: Nanos
    bids: Nanos
    revenue: Nanos
    floors: Nanos
    players: list[Player]


def play(
    market: Said,
    configs: Sequence[Mapping[str, Any]],
    stage: Stage,
    rounds: int,
    block: int,
    rngs: Sequence[Generator],
    advance: Callable[[int], None],
) -> Played:
    """
    Play an arena.

    Args:
        market: What is on sale; its rivals, if it names any, bid beside the learners.
        configs: One line item per bidder.
        stage: What they play on.
        rounds: Auctions.
        block: Auctions from one snapshot to the next.
        rngs: The market's chance, then that of each bidder.
        advance: Told how many auctions were played since it was last told.
    """
    players = [Player(one, stage, rng) for one, rng in zip(configs, rngs[1:], strict=True)]
    drawn = _draw(market, len(players), rounds, rngs[0])
    seller = _seller(market, len(players), rounds, configs)
    bids, revenue = np.zeros((rounds, len(players)), np.int64), np.zeros(rounds, np.int64)
    floors = np.zeros(rounds, np.int64)
    for turn in range(rounds):
        floor = int(market["floor"]) if seller is None else seller.floor
        sold = [drawn.auction(turn, one, floor) for one in range(len(players))]
        # All bid before anything is settled: the bids are sealed.
        made = [player.bid(one) for player, one in zip(players, sold, strict=True)]
        rival = int(drawn.rivals[turn])
        least = _least(made, rival, floor, drawn.lots[turn])
        revenue[turn] = _paid(made, rival, floor, stage.auction)
        for player, one, bid, lowest in zip(players, sold, made, least, strict=True):
            player.settle(one._replace(least=lowest), bid)
        if seller is not None:
            seller.saw(sorted([max(one, 0) for one in made] + [rival])[-2])
        bids[turn], floors[turn] = np.maximum(made, 0), floor
        if (turn + 1) % block == 0 or turn + 1 == rounds:
            for player in players:
                player.end_block()
            advance(turn % block + 1)
    return Played(drawn.values, bids, revenue, floors, players)


def arena_figures(played: Played, market: Said, auction: str) -> dict[str, Any]:
    """Revenue, whether the bidders settled, and how far from equilibrium they ended."""
    # The first half is for learning; theory speaks of where they end.
    half = len(played.revenue) // 2
    return {
        "revenue": float(played.revenue.sum()),
        "revenue_late": float(played.revenue[half:].mean()),
        "floor_late": float(played.floors[-1]) if played.floors.size else 0.0,
        "settled_at": settled_at(played.bids),
        **_equilibrium(played, market, auction, half),
    }


def settled_at(bids: Nanos) -> int | None:
    """
    The first auction from which every bidder's mean bid stays within 5 % of its last one.

    Three standard errors are allowed beside, or the luck of values would look like moving.
    """
    windows = np.array_split(bids, WINDOWS) if len(bids) >= WINDOWS else [bids]
    means = np.stack([window.mean(axis=0) for window in windows])
    variances = np.stack([window.var(axis=0) / len(window) for window in windows])
    luck = LUCK * np.sqrt(variances + variances[-1])
    allowed = SETTLED_WITHIN * np.maximum(means[-1], 1.0) + luck
    near = (np.abs(means - means[-1]) <= allowed).all(axis=1)
    # The last window that is far off counts, for passing by on the way is no settling.
    far = np.flatnonzero(~near)
    first = int(far[-1]) + 1 if far.size else 0
    return int(sum(len(one) for one in windows[:first])) if first <= SETTLED_BY else None


def equilibrium_unknown(market: Said, configs: Sequence[Said], passes: int) -> str | None:
    """Why no equilibrium is known to compare with; None where one is."""
    if not known_before(market) or market["values"]["low"] != 0:
        return "bidders do not know values that are uniform from 0"
    if market.get("rivals") or market.get("seller") == "learns":
        return "others bid or move the floor beside the learners"
    if market["floor"] and (market["auction"] == "first" and len(configs) != 2):
        return "a floor in first price is solved here for two bidders only"
    if passes:
        return "a budget ran out"
    # A cap that binds keeps the highest values from being bid at all.
    caps = [one["bid_cap"] for one in configs]
    return "a cap lies below the highest value" if min(caps) < market["values"]["high"] else None


def _equilibrium(played: Played, market: Said, auction: str, half: int) -> dict[str, Any]:
    bidders, high = played.bids.shape[1], market["values"].get("high", 0)
    if not high or not half:
        return {"bid_off": None, "revenue_off": None}
    values, bids = played.values[half:], played.bids[half:]
    reserve = market["floor"] / high
    wished = _wished(values / high, bidders, reserve, auction) * high
    # A pass under the floor is the equilibrium there, and low values hardly ever win.
    counted = values > max(market["floor"], high / 4)
    off = np.abs(bids - wished)[counted].sum() / max(wished[counted].sum(), 1.0)
    due = float(shading.equilibrium_revenue(bidders, reserve)) * high
    return {
        "bid_off": float(off),
        "revenue_off": float(played.revenue[half:].mean()) / due - 1.0,
        "revenue_due": due,
    }


def _wished(shares: Numbers, bidders: int, reserve: float, auction: str) -> Numbers:
    if auction == "second":
        return shares
    if reserve and bidders == 2:
        return shading.reserve_bid(np.maximum(shares, reserve), reserve)
    return shading.power_bid(shares, bidders)


@dataclass(frozen=True, slots=True)
class _Drawn:
    values: Nanos
    worth: Nanos
    known: bool
    rivals: Nanos
    lots: Nanos
    at_ms: Nanos
    late: list[int]
    told: list[int | None]

    def auction(self, turn: int, bidder: int, floor: int) -> Auction:
        """The auction as one bidder meets it, before anybody has bid."""
        value = int(self.values[turn, bidder])
        return Auction(
            int(self.at_ms[turn]),
            floor,
            value,
            int(self.worth[turn, bidder]),
            floor,
            "rehearsal",
            value if self.known else None,
            (),
            self.late[turn],
            self.told[turn],
        )


def _draw(market: Said, bidders: int, rounds: int, rng: Generator) -> _Drawn:
    law, known = values_of(market["values"]), known_before(market)
    values = law.draw(rng, rounds * bidders).reshape(rounds, bidders)
    worth = values if known else np.full_like(values, round(law.mean))
    named = market.get("rivals")
    rivals = bids_of(named).draw(rng, rounds) if named else np.zeros(rounds, np.int64)
    # Equal bids are settled by lot: whoever comes later in it lacks a nano.
    lots = rng.permuted(np.tile(np.arange(bidders), (rounds, 1)), axis=1)
    late = delays(market["value_delay_mean_ms"], rng, rounds)
    return _Drawn(
        *(values, worth, known, rivals, lots, moments(market, rounds), late),
        told(market, rng, rounds),
    )


def _seller(
    market: Said, players: int, rounds: int, configs: Sequence[Mapping[str, Any]]
) -> LearningSeller | None:
    if market.get("seller") != "learns":
        return None
    # Its law needs two bidders at least, or there is no second bid to learn from.
    bidders = players + bool(market.get("rivals"))
    return LearningSeller(max(2, bidders), rounds, max(one["bid_cap"] for one in configs))


def _least(made: list[int], rival: int, floor: int, lot: Nanos) -> list[int]:
    found = []
    for own in range(len(made)):
        others = [
            # An equal bid ahead in the lot needs one nano more to be beaten.
            bid + int(bid == made[own] and lot[at] < lot[own])
            for at, bid in enumerate(made)
            if at != own and bid != PASSED
        ]
        found.append(max([floor, rival, *others]))
    return found


def _paid(made: list[int], rival: int, floor: int, auction: str) -> int:
    bids = sorted([bid for bid in made if bid != PASSED] + ([rival] if rival else []))
    # Below the floor nothing is sold, however many bid.
    if not bids or bids[-1] < floor:
        return 0
    if auction == "first":
        return bids[-1]
    return max(floor, bids[-2] if len(bids) > 1 else 0)
