"""One rehearsal from its order to its figures: every policy on every seed of the same auctions.

An order is plain data, checked where it came in: `policies` (name and a line item's internal
configuration), `market`, `rounds`, `seeds`, `seed`, `block`. Every policy meets the same draws
of a seed, so differences between policies carry no luck of the market.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from functools import partial
from typing import Any

import numpy as np
from numpy.random import Generator

from service.decision.methods import METHODS
from service.rehearsal import lockstep, ring
from service.rehearsal.figures import (
    Run,
    differences,
    figure,
    money_figure,
    policy_figures,
    price_figure,
    run_of,
)
from service.rehearsal.grounds import Ground, ground, is_at_once
from service.rehearsal.laws import bids_of
from service.rehearsal.player import Auction, Player, Stage
from service.rehearsal.seller import LearningSeller

Order = Mapping[str, Any]
Advance = Callable[[int], None]

ARENA, SELLER = "arena", "learning_seller"
REPLAYED = ("csv", "own_log")
TOGETHER = 2_000_000  # Auctions of all seeds held in memory at once.
ASSUMED = (
    "one worker holds all the money there is, and a new snapshot comes every block of auctions",
    "every learner begins with nothing learnt",
    "a flight that ends lasts as long as the rehearsal",
)
AT_ONCE = "values are told with their win, so windows close before the next snapshot"
AT_MEAN = "what is won counts at its mean value; learning sees values as drawn"
AS_COME = "what is won counts at the value it brought"


def stage_of(market: Mapping[str, Any], starts_ms: int = 0) -> Stage:
    """What all policies have in common on a market."""
    return Stage(market["auction"], market["span_ms"], is_at_once(market), starts_ms)


def auctions_of(order: Order) -> int:
    """How many auctions there are to play, over policies and seeds."""
    policies = 1 if order["market"]["kind"] == ARENA else len(order["policies"])
    return int(order["rounds"] * order["seeds"] * policies)


def rehearse(order: Order, advance: Advance) -> dict[str, Any]:
    """
    Play an order on an invented market; amounts in nanos under names in `_nanos`.

    Args:
        order: See the top of this file.
        advance: Told how many auctions were played since it was last told.
    """
    kind = order["market"]["kind"]
    if kind == ARENA:
        return _arena(order, advance)
    runs, passes, sold = list[list[Run]](), list[Counter[str]](), list[dict[str, Any]]()
    for at, policy in enumerate(order["policies"]):
        play = partial(_before_seller, sold=sold) if kind == SELLER else _on_ground
        played, why = play(order, policy["config"], at, advance)
        runs.append(played)
        passes.append(why)
    extra = {"sellers": sold} if kind == SELLER else {}
    return {**_told(order, runs, passes), **extra}


def replay(
    order: Order, auctions: Iterable[Sequence[Auction]], advance: Advance, starts_ms: int
) -> dict[str, Any]:
    """
    Play every policy on auctions that were recorded, each read once.

    Args:
        order: As for `rehearse`; its market says how the auctions were held.
        auctions: In order, in pieces of at most a block.
        advance: Told how many auctions were read since it was last told.
        starts_ms: When the first of them came.
    """
    policies, stage = order["policies"], stage_of(order["market"], starts_ms)
    tables = [
        [Player(one["config"], stage, rng_of(order, seed, at)) for seed in range(order["seeds"])]
        for at, one in enumerate(policies)
    ]
    # The log may be read once only, so all players go through it side by side.
    for piece in auctions:
        for player in (player for table in tables for player in table):
            for auction in piece:
                player.play(auction)
            player.end_block()
        advance(len(piece))
    played = zip(tables, policies, strict=True)
    runs = [_runs(table, policy["config"], stage) for table, policy in played]
    return _told(order, runs, [_passes(table) for table in tables])


def rng_of(order: Order, seed: int, policy: int | None = None) -> Generator:
    """The chance of a market's seed, or that of a policy on it."""
    # A list of numbers seeds streams apart; a sum of them would have some coincide.
    return np.random.default_rng([order["seed"], seed, 0 if policy is None else 1 + policy])


def grounds(order: Order, seeds: Iterable[int]) -> list[Ground]:
    """The auctions of these seeds."""
    return [ground(order["market"], rng_of(order, seed), order["rounds"]) for seed in seeds]


def _on_ground(
    order: Order, config: Mapping[str, Any], at: int, advance: Advance
) -> tuple[list[Run], Counter[str]]:
    stage, rounds = stage_of(order["market"]), order["rounds"]
    runs, passes = list[Run](), Counter[str]()
    # Much faster, and held to the same bids by a test.
    if lockstep.fits(config, stage):
        size = max(1, TOGETHER // rounds)
        for first in range(0, order["seeds"], size):
            these = grounds(order, range(first, min(first + size, order["seeds"])))
            found = lockstep.play_many(config, stage, these, order["block"], advance)
            runs += [run_of(one, config, stage.auction) for one in found.columns]
            passes += found.passes
        return runs, passes
    for seed in range(order["seeds"]):
        player = Player(config, stage, rng_of(order, seed, at))
        _play_all(player, grounds(order, [seed])[0].auctions(), order["block"], advance)
        runs += _runs([player], config, stage)
        passes += player.passes
    return runs, passes


def _play_all(player: Player, auctions: list[Auction], block: int, advance: Advance) -> None:
    for start in range(0, len(auctions), block):
        piece = auctions[start : start + block]
        for auction in piece:
            player.play(auction)
        player.end_block()
        advance(len(piece))


def _before_seller(
    order: Order,
    config: Mapping[str, Any],
    at: int,
    advance: Advance,
    sold: list[dict[str, Any]],
) -> tuple[list[Run], Counter[str]]:
    """Every policy meets a seller of its own, who learns from what it and rivals bid."""
    market, stage, rounds = order["market"], stage_of(order["market"]), order["rounds"]
    players, revenue, floors = list[Player](), list[float](), list[float]()
    for seed in range(order["seeds"]):
        rng = rng_of(order, seed)
        auctions = ground({**market, "kind": "iid"}, rng, rounds).auctions()
        # Each rival is drawn apart, for the seller needs the second bid and not only the highest.
        others = market["bidders"] - 1
        rivals = bids_of(market["rivals"]).draw(rng, rounds * others).reshape(rounds, others)
        player = Player(config, stage, rng_of(order, seed, at))
        seller = LearningSeller(market["bidders"], rounds, int(market["top"]))
        revenue.append(_sell(player, seller, auctions, np.sort(rivals, axis=1), order, advance))
        floors.append(seller.floor)
        players.append(player)
    sold.append({"revenue": money_figure(revenue), "floor_at_end": price_figure(floors)})
    return _runs(players, config, stage), _passes(players)


def _sell(
    player: Player,
    seller: LearningSeller,
    auctions: list[Auction],
    rivals: Any,
    order: Order,
    advance: Advance,
) -> float:
    revenue, block = 0, order["block"]
    for turn, (auction, bids) in enumerate(zip(auctions, rivals.tolist(), strict=True), start=1):
        floor = max(seller.floor, auction.floor)
        # Nobody may see the least winning bid before bidding, so the floor stands in for it.
        bid = player.bid(auction._replace(floor=floor, least=floor))
        player.settle(auction._replace(floor=floor, least=max(floor, bids[-1])), bid)
        highest, second = sorted([max(bid, 0), *bids], reverse=True)[:2]
        if highest >= floor:
            revenue += max(second, floor) if order["market"]["auction"] == "second" else highest
        # It sees the second bid of all, as its method wants, and cuts it at its floor itself.
        seller.saw(second)
        if turn % block == 0 or turn == len(auctions):
            player.end_block()
            advance((turn - 1) % block + 1)
    return float(revenue)


def _arena(order: Order, advance: Advance) -> dict[str, Any]:
    market, policies, stage = order["market"], order["policies"], stage_of(order["market"])
    configs = [policy["config"] for policy in policies]
    sizes, tables, found = (order["rounds"], order["block"]), list[list[Player]](), []
    for seed in range(order["seeds"]):
        rngs = [rng_of(order, seed), *(rng_of(order, seed, at) for at in range(len(configs)))]
        played = ring.play(market, configs, stage, *sizes, rngs, advance)
        tables.append(played.players)
        found.append(ring.arena_figures(played, market, stage.auction))
    by_policy = [[table[at] for table in tables] for at in range(len(configs))]
    runs = [_runs(of, config, stage) for of, config in zip(by_policy, configs, strict=True)]
    passes = [_passes(of) for of in by_policy]
    # Theory knows of no budgets: one auction passed for want of money is outside of it.
    poor = sum(one["budget_spent"] + one["budget_held"] for one in passes)
    why = ring.equilibrium_unknown(market, configs, poor)
    return {**_told(order, runs, passes), "arena": _arena_told(found, why)}


def _arena_told(found: list[dict[str, Any]], why: str | None) -> dict[str, Any]:
    settled = [one["settled_at"] for one in found]
    late = [one for one in settled if one is not None]
    said: dict[str, Any] = {
        "revenue": money_figure([one["revenue"] for one in found]),
        "revenue_per_auction_late": price_figure([one["revenue_late"] for one in found]),
        "floor_at_end": price_figure([one["floor_late"] for one in found]),
        "seeds_settled": len(late),
        "settled_at_auction": figure(late) if late else None,
    }
    if why is not None:
        return {**said, "equilibrium": None, "equilibrium_unknown": why}
    off = {name: figure([one[name] for one in found]) for name in ("bid_off", "revenue_off")}
    due = round(found[0]["revenue_due"])
    return {**said, "equilibrium": {**off, "revenue_per_auction_due_cpm_nanos": due}}


def _told(
    order: Order, runs: Sequence[Sequence[Run]], passes: Sequence[Counter[str]]
) -> dict[str, Any]:
    market, policies = order["market"], order["policies"]
    names = [policy["name"] for policy in policies]
    as_come = market["kind"] in (*REPLAYED, "coin_flip") or market["values"]["law"] == "even"
    assumed = [
        *ASSUMED,
        *([AT_ONCE] if is_at_once(market) else []),
        AS_COME if as_come else AT_MEAN,
    ]
    return {
        "currency": policies[0]["config"]["currency"],
        "market": market["kind"],
        "auction": market["auction"],
        "auctions": runs[0][0].rounds,
        "seeds": order["seeds"],
        "span": "10 % to 90 % of the seeds",
        "assumed": [*assumed, *_brakes(policies)],
        "policies": [
            policy_figures(policy["name"], policy["config"], of, why)
            for policy, of, why in zip(policies, runs, passes, strict=True)
        ],
        "differences": differences(names, runs),
    }


def _brakes(policies: Sequence[Mapping[str, Any]]) -> list[str]:
    """What of the methods at play no published guarantee covers."""
    learn = any(METHODS[one["config"]["policy"]["method"]].learns for one in policies)
    return ["no theorem covers learning, pacing and the allowance together"] if learn else []


def _runs(players: Sequence[Player], config: Mapping[str, Any], stage: Stage) -> list[Run]:
    taken = [player.taken for player in players]
    return [
        run_of(one.columns, config, stage.auction, (one.untold, one.untold_paid)) for one in taken
    ]


def _passes(players: Sequence[Player]) -> Counter[str]:
    return sum((player.passes for player in players), Counter[str]())
