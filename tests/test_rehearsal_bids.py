"""Production and rehearsal make the same bids from the same snapshot and the same generator."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.random import Generator

from service.bidding import Answer
from service.decision.methods import METHODS
from service.learner import hashing
from service.learner.memory import Memory
from service.rehearsal.grounds import ground
from service.rehearsal.player import Auction, Player, Stage
from service.store import learners, line_items
from service.store.facts import fact
from tests.builders import Worker, working
from tests.rehearsal.orders import PLENTY, SCALE, config, market

pytestmark = pytest.mark.anyio

TAUGHT = 300  # Auctions that each snapshot was learnt from.
SOURCES = ("rehearsal", "north", "south")
DEVICES = ("phone", "desk")
SHORT, LONG = 5_000, 100_000
CASES: dict[str, dict[str, Any]] = {
    **{name: {} for name in METHODS},
    "kl-ucbid, fees": {"fees": {"share": 10**8, "cpm": 1_000_000}},
    "ucbid, allowance": {"allowance": SCALE},
    "mean, hints": {"value": {"hints": True}},
    "kl-ucbid, paced": {"daily_budget": 50 * SCALE, "pacing": {"method": "dual"}},
    "kl-ucbid, forgetting": {"value": {"drift": {"how": "discount", "rounds": 1000}}},
}


def built(case: str) -> dict[str, Any]:
    """The line item of a case; only the flat one needs no value."""
    method = case.partition(",")[0]
    changes = {
        name: dict(one) if isinstance(one, dict) else one for name, one in CASES[case].items()
    }
    changes["value"] = {"arrival": "once", "window_ms": 60_000, **changes.get("value", {})}
    return config(method, id=case.replace(", ", "-"), **{"allowance": PLENTY, **changes})


def taught(own: dict[str, Any], rng: Generator, key: bytes) -> Memory:
    """What a line item has learnt in some auctions of second price, and of first where it may."""
    memory: Memory | None = None
    for auction in kinds(own):
        player = Player(own, stage(auction), rng, memory)
        for one in ground(market(), rng, TAUGHT).auctions():
            hashed = hashing.hashed({"device": DEVICES[int(rng.integers(2))]}, key)
            player.play(one._replace(hint=SCALE // 4, hashed=hashed))
        player.end_block()
        memory = player.memory
    assert memory is not None
    return memory


def kinds(own: dict[str, Any]) -> tuple[str, ...]:
    """The auctions a method bids in."""
    by_law = METHODS[own["policy"]["method"]].by_law
    return ("second",) if by_law else ("second", "first")


def stage(auction: str) -> Stage:
    """A stage of a day that tells nothing at once."""
    return Stage(auction, 86_400_000, at_once=False)


async def differences(worker: Worker, case: str, count: int) -> list[tuple[Any, ...]]:
    """So many opportunities of one case, answered by both; what they disagree in."""
    own, rng = built(case), np.random.default_rng(len(case))
    key = bytes.fromhex(worker.database.read(lambda c: fact(c, "feature_key")))
    memory = taught(own, rng, key)
    # Paced as it was taught to be, but with money for every bid: production keeps holds.
    kept = {**own, "daily_budget": PLENTY if own["daily_budget"] else None}
    worker.database.write(lambda c: line_items.create(c, kept, 1))
    worker.database.write(lambda c: learners.begin(c, own["id"], memory.to_bytes(), 1))
    worker.bidder._generator, mirrored = np.random.default_rng(5), np.random.default_rng(5)
    # A budget that never binds: production bids out of slices, a rehearsal out of all there is.
    players = {
        kind: Player({**own, "daily_budget": None, "budget": 10**18}, stage(kind), mirrored, memory)
        for kind in kinds(own)
    }
    found, seen = [], set[int | str]()
    for number in range(count):
        kind = kinds(own)[number % len(players)]
        features: dict[str, str | float | bool] = {
            "device": DEVICES[int(rng.integers(2))],
            "hour": float(rng.integers(24)),
        }
        wish = {
            "source": SOURCES[int(rng.integers(3))],
            "floor": int(rng.integers(0, 6 * SCALE // 5)) if rng.random() < 0.5 else 0,
            "value_hint": int(rng.integers(1, SCALE)) if rng.random() < 0.5 else None,
        }
        answer = await worker.bid(own["id"], auction=kind, features=features, **wish)
        bid = bid_of(players[kind], wish, hashing.hashed(features, key))
        seen.add(bid)
        if bid != said(answer):
            found.append((case, number, bid, said(answer)))
    # Or nothing would be compared: at least the floor makes passes and the auctions two bids.
    assert "under_floor" in seen, case
    assert len(seen) >= (2 if case == "flat" else 3), case
    return found


def bid_of(player: Player, wish: dict[str, Any], hashed: hashing.Hashed) -> int | str:
    """The rehearsed bid, net of fees, or the reason of the pass."""
    before = dict(player.passes)
    auction = Auction(0, 0, None, 0, wish["floor"], wish["source"], wish["value_hint"], hashed)
    bid = player.bid(auction)
    new = [reason for reason, times in player.passes.items() if times != before.get(reason, 0)]
    return new[0] if new else bid


def said(answer: Answer) -> int | str | None:
    """The bid of production, or its reason."""
    return answer.reason if answer.bid is None else answer.bid


async def all_differences(url: str, count: int) -> tuple[int, list[tuple[Any, ...]]]:
    """Opportunities spread evenly over all cases."""
    each, found = -(-count // len(CASES)), list[tuple[Any, ...]]()
    async with working(url, queue_max=2 * count) as worker:
        for case in CASES:
            found += await differences(worker, case, each)
    return each * len(CASES), found


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_rehearsed_bids_are_those_of_production(migrated_url: str) -> None:
    """5,000 opportunities over all methods, with fees, hints, pacing and floors: no difference."""
    count, found = await all_differences(migrated_url, SHORT)
    assert count >= SHORT
    assert found == []


@pytest.mark.long
@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_hundred_thousand_bids_are_the_same(migrated_url: str) -> None:
    """100,000 opportunities over all methods: no difference."""
    count, found = await all_differences(migrated_url, LONG)
    assert count >= LONG
    assert found == []
