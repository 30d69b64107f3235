"""Arenas of line items that bid by the code of production, against what theory knows of them."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from service.learner.shading import equilibrium_revenue
from service.rehearsal.rehearse import rehearse, stage_of
from service.rehearsal.ring import (
    Played,
    arena_figures,
    equilibrium_unknown,
    play,
    settled_at,
)
from tests.rehearsal.orders import PLENTY, SCALE, config, market, order

KNOWN: dict[str, Any] = {
    "value": {"ceiling": SCALE, "hints": True, "arrival": "once", "typical": SCALE // 2},
    "pacing": {"method": "none"},
    "allowance": PLENTY,
}


def private(**changes: Any) -> dict[str, Any]:
    """Values uniform and known to each bidder alone."""
    values = {"law": "even", "low": 0, "high": SCALE}
    return market(kind="arena", rivals=None, values=values, **changes)


def arena(bidders: int, rounds: int, block: int, **changes: Any) -> dict[str, Any]:
    """What an arena of like bidders comes to."""
    configs = [config("mean", **KNOWN) for _ in range(bidders)]
    said = order(*configs, market=private(**changes), rounds=rounds, seeds=1, block=block)
    for number, policy in enumerate(said["policies"]):
        policy["name"] = f"bidder {number}"
    found: dict[str, Any] = rehearse(said, lambda count: None)
    return found


@pytest.mark.parametrize(("bidders", "floor"), [(2, 0.0), (3, 0.0), (2, 0.5), (3, 0.5)])
def test_second_price_brings_the_revenue_of_theory(bidders: int, floor: float) -> None:
    """Bids are the values to the nano; revenue within 4 % of 1/3, 1/2, 5/12 and 0.53125."""
    found = arena(bidders, 4_000, 400, floor=round(floor * SCALE))["arena"]["equilibrium"]
    assert found["bid_off"]["mean"] < 1e-6
    assert found["revenue_off"]["mean"] == pytest.approx(0.0, abs=0.04)
    due = found["revenue_per_auction_due_cpm_nanos"] / SCALE
    assert due == pytest.approx(
        {(2, 0.0): 1 / 3, (3, 0.0): 1 / 2, (2, 0.5): 5 / 12, (3, 0.5): 0.53125}[bidders, floor]
    )


def test_first_price_learners_come_near_the_equilibrium() -> None:
    """
    20,000 auctions bring the bids of two within a quarter of v / 2, revenue to a fifth of 1/3.

    They climb from next to nothing, a tick of their counts at a time, and fall back when both
    stand on one tick. `test_arena` has the same learners on ticks of a per cent, nearer to theory.
    """
    value = {**KNOWN["value"], "drift": {"how": "discount", "rounds": 4_000}}
    # Ticks are parts of the cap, so a cap far above all values makes them coarser.
    own = config("mean", **{**KNOWN, "value": value, "bid_cap": 8 * SCALE})
    said = private(auction="first")
    rngs = [np.random.default_rng(seed) for seed in range(3)]
    played = play(said, [own, own], stage_of(said), 20_000, 100, rngs, lambda count: None)
    found = arena_figures(played, said, "first")
    assert found["bid_off"] < 0.25
    assert found["revenue_off"] == pytest.approx(0.0, abs=0.2)


def test_money_is_conserved_and_one_wins() -> None:
    """What the bidders pay is what the seller gets, in both kinds of auction; ties once."""
    for auction in ("first", "second"):
        said = private(auction=auction, floor=SCALE // 10)
        configs = [
            config("mean", **KNOWN),
            config("flat", **{**KNOWN, "value": {**KNOWN["value"]}}),
        ]
        rngs = [np.random.default_rng(seed) for seed in range(4)]
        played = play(said, [*configs, configs[1]], stage_of(said), 600, 50, rngs, lambda n: None)
        columns = [player.taken.columns for player in played.players]
        wins = np.sum([one.won for one in columns], axis=0)
        assert wins.max() == 1
        assert np.array_equal(np.sum([one.paid for one in columns], axis=0), played.revenue)
        # Two flat bids tie wherever they are the highest, and each wins about half of those.
        assert 0.7 < columns[1].won.sum() / columns[2].won.sum() < 1.4


def test_a_budget_takes_a_bidder_out() -> None:
    """One that runs dry stays out, says so, and then no equilibrium is claimed."""
    poor = config("mean", **KNOWN, budget=5 * SCALE)
    rich = config("mean", **KNOWN)
    said = order(poor, rich, market=private(), rounds=600, seeds=1, block=50)
    said["policies"][1]["name"] = "rich"
    found = rehearse(said, lambda count: None)
    first, second = found["policies"]
    assert first["budget_share"]["mean"] <= 1.0
    assert first["spend"]["mean_nanos"] <= 5 * SCALE
    assert second["wins"]["mean"] > 3 * first["wins"]["mean"]
    # What is left in hand may still be bid, so a bidder is not always quite out of money.
    assert found["arena"]["equilibrium"] is None or first["passes"] == {}


def test_a_seller_may_learn_its_floor_in_an_arena() -> None:
    """Its floor rises above nothing, and no equilibrium is claimed."""
    found = arena(2, 6_000, 500, seller="learns")["arena"]
    assert found["equilibrium"] is None
    assert "floor" in found["equilibrium_unknown"]


def test_settling_is_told_from_moving() -> None:
    """Bids that rise to the end have not settled; those that stop rising have, from there on."""
    rising = np.linspace(0, SCALE, 2000).astype(np.int64)[:, np.newaxis]
    assert settled_at(rising) is None
    stops = np.minimum(2 * rising, SCALE)
    assert settled_at(stops) == pytest.approx(1000, abs=100)
    assert settled_at(np.full((2000, 2), SCALE)) == 0


def test_the_distance_is_nothing_in_equilibrium() -> None:
    """Bids of v / 2 by two, and what they bring, are 0 off to a per cent."""
    values = np.random.default_rng(3).integers(0, SCALE, (40_000, 2))
    bids = values // 2
    played = Played(values, bids, bids.max(axis=1), np.zeros(40_000, np.int64), [])
    found = arena_figures(played, private(auction="first"), "first")
    assert found["bid_off"] == pytest.approx(0.0, abs=1e-6)
    assert found["revenue_off"] == pytest.approx(0.0, abs=0.01)
    assert found["revenue_due"] == pytest.approx(float(equilibrium_revenue(2)) * SCALE)


@pytest.mark.parametrize(
    ("changes", "bidders", "passes", "cap", "words"),
    [
        ({}, 2, 0, SCALE, None),
        ({"floor": SCALE // 2}, 3, 0, SCALE, None),
        ({"auction": "first", "floor": SCALE // 2}, 2, 0, SCALE, None),
        ({"auction": "first", "floor": SCALE // 2}, 3, 0, SCALE, "two bidders only"),
        ({"seller": "learns"}, 2, 0, SCALE, "move the floor"),
        ({"values": {"law": "even", "low": 1, "high": SCALE}}, 2, 0, SCALE, "uniform from 0"),
        ({"values": {"law": "events", "chance": 1, "amount": 1}}, 2, 0, SCALE, "do not know"),
        ({}, 2, 1, SCALE, "a budget ran out"),
        ({}, 2, 0, SCALE - 1, "a cap lies below"),
    ],
)
def test_why_no_equilibrium_is_known(
    changes: dict[str, Any], bidders: int, passes: int, cap: int, words: str | None
) -> None:
    """Each reason in words, and none where theory has an answer."""
    said = {**private(), **changes}
    found = equilibrium_unknown(said, [config("mean", bid_cap=cap)] * bidders, passes)
    assert (found is None) if words is None else (words in (found or ""))


def test_rivals_beside_the_learners_have_no_equilibrium() -> None:
    """Theory knows of bidders that are alike, and these are not."""
    said = {**private(), "rivals": {"law": "uniform", "low": 0, "high": SCALE}}
    assert "others bid" in (equilibrium_unknown(said, [config("mean")] * 2, 0) or "")


@pytest.mark.parametrize("auction", ["second", "first"])
@pytest.mark.parametrize("rivals", [None, {"law": "uniform", "low": 0, "high": SCALE}])
def test_an_arena_is_played_again_from_its_seeds(
    auction: str, rivals: dict[str, Any] | None
) -> None:
    """Bids, floors and revenue to the nano, and progress adds up to all auctions."""
    said = {**private(auction=auction), "rivals": rivals}
    found, counted = [], list[int]()
    for _ in range(2):
        rngs = [np.random.default_rng(seed) for seed in range(3)]
        configs = [config("mean", **KNOWN), config("flat", **KNOWN)]
        found.append(play(said, configs, stage_of(said), 70, 20, rngs, counted.append))
    assert np.array_equal(found[0].bids, found[1].bids)
    assert np.array_equal(found[0].revenue, found[1].revenue)
    assert counted == [20, 20, 20, 10] * 2
    won = np.sum([one.taken.columns.won for one in found[0].players], axis=0)
    assert won.max() == 1
    paid = np.sum([one.taken.columns.paid for one in found[0].players], axis=0)
    # What a rival outside pays is the seller's too, and no bidder's cost.
    assert (paid <= found[0].revenue).all()


def test_nobody_is_sold_to_below_the_floor() -> None:
    """Two flat bids of a half under a floor above it: no bids, no revenue, all passes."""
    said = private(floor=SCALE // 2 + 1)
    rngs = [np.random.default_rng(seed) for seed in range(3)]
    flat = config("flat", pacing={"method": "none"})
    played = play(said, [flat, flat], stage_of(said), 30, 10, rngs, lambda count: None)
    assert (played.revenue.sum(), played.bids.sum()) == (0, 0)
    assert [dict(one.passes) for one in played.players] == [{"under_floor": 30}] * 2


@pytest.mark.parametrize("rounds", [1, 5, 19])
def test_a_short_arena_is_one_window(rounds: int) -> None:
    """Too few auctions to split are settled from the first one."""
    assert settled_at(np.full((rounds, 2), SCALE)) == 0
