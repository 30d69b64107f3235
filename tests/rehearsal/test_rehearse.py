"""Rehearsals from order to figures: every market, late and lost news, sums that must agree."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from service.decision.methods import METHODS
from service.rehearsal.figures import figure, money_figure, run_of
from service.rehearsal.grounds import ground
from service.rehearsal.hindsight import best_fixed_bid
from service.rehearsal.player import Player
from service.rehearsal.rehearse import auctions_of, rehearse, rng_of, stage_of
from tests.rehearsal.orders import SCALE, config, market, order

MARKETS: dict[str, dict[str, Any]] = {
    "iid": {},
    "drift": {"kind": "drift"},
    "abrupt": {"kind": "abrupt"},
    "coin flip": {"kind": "coin_flip"},
    "above value": {"kind": "above_value"},
    "late": {"value_delay_mean_ms": 3_600_000, "outcome_delay_ms": 2_000},
    "lost": {"lost_share": 0.3, "outcome_delay_ms": 2_000},
    "first": {"auction": "first"},
    "floor": {"floor": SCALE // 3},
    "lognormal": {"rivals": {"law": "lognormal", "median": SCALE // 3, "sigma": 0.8}},
    "baskets": {"values": {"law": "baskets", "chance": 0.3, "mean": SCALE, "ceiling": SCALE}},
    "seller": {"kind": "learning_seller", "bidders": 3, "top": SCALE},
    "curve": {
        "rivals": {
            **{"law": "empirical", "prices": [SCALE // 4, SCALE // 2]},
            **{"chances": [0.3, 0.8], "beyond": 3 * SCALE},
        }
    },
}


def played(said: dict[str, Any]) -> dict[str, Any]:
    """An order played, with all its auctions told on the way."""
    told = list[int]()
    found: dict[str, Any] = rehearse(said, told.append)
    assert sum(told) == auctions_of(said)
    return found


@pytest.mark.parametrize("name", sorted(MARKETS))
def test_every_market_is_played(name: str) -> None:
    """Surplus is worth less spend at every point, spend never falls and keeps to the budget."""
    budget = 60 * SCALE
    said = order(
        config("kl-ucbid", budget=budget), config("thompson"), market=market(**MARKETS[name])
    )
    found = played(said)
    learner = found["policies"][0]
    # A win that nobody reports costs money that no budget knows of, and is told apart.
    unknown = learner.get("spend_never_told", {"mean_nanos": 0})["mean_nanos"]
    assert (unknown > 0) == (name == "lost")
    assert 0 < learner["spend"]["mean_nanos"] - unknown <= budget
    assert learner["budget_share"]["high"] <= 1.0
    spend = [row["spend"]["mean_nanos"] for row in learner["curve"]]
    assert spend == sorted(spend)
    assert learner["curve"][-1]["surplus"] == learner["surplus"]
    assert learner["curve"][-1]["auction"] == said["rounds"] == found["auctions"]
    assert learner["regret"]["error_nanos"] >= 0
    assert len(found["differences"]) == 1
    if name == "curve":
        # The two prices win 80 % at most: what the curve does not know is never won.
        assert learner["wins"]["mean"] <= 0.9 * said["rounds"]


def test_the_same_order_plays_the_same() -> None:
    """And another seed plays otherwise."""
    runs = [played(order(config("thompson"), seed=seed)) for seed in (1, 1, 2)]
    assert runs[0] == runs[1]
    assert runs[0]["policies"] != runs[2]["policies"]


@pytest.mark.parametrize("method", sorted(METHODS))
def test_every_method_plays(method: str) -> None:
    """Each bids on something, and what it wins is paid at the competing bid."""
    own, said = config(method), order(config(method), rounds=120)
    player = Player(own, stage_of(said["market"]), rng_of(said, 0, 0))
    for auction in ground(said["market"], rng_of(said, 0), 120).auctions():
        player.play(auction)
    player.end_block()
    columns = player.taken.columns
    assert columns.won.any()
    assert np.array_equal(columns.paid, np.where(columns.won, columns.least, 0))
    assert (columns.least[columns.won] <= columns.bid[columns.won]).all()
    assert (columns.least[~columns.won] > columns.bid[~columns.won]).all()


def test_late_news_is_learnt_late_and_lost_news_never() -> None:
    """While news is on its way a hold stands and nothing is known; a lost win is counted apart."""
    late = market(outcome_delay_ms=60_000_000)
    own = config("kl-ucbid", grace_ms=80_000_000)
    player = Player(own, stage_of(late), np.random.default_rng(1))
    for auction in ground(late, np.random.default_rng(2), 100).auctions():
        player.play(auction)
        player.end_block()
    heard = player.memory.total
    assert 0 < heard.wins + heard.losses < 60
    lost = market(lost_share=0.5)
    player = Player(own, stage_of(lost), np.random.default_rng(1))
    for auction in ground(lost, np.random.default_rng(2), 100).auctions():
        player.play(auction)
        player.end_block()
    assert 30 < player.taken.untold < 70
    assert player.taken.untold_paid > 0


def test_a_hold_that_is_never_told_comes_back_after_grace() -> None:
    """With money for one bid a second bid passes until then."""
    lost = market(lost_share=0.9)
    own = config("flat", budget=SCALE // 2, grace_ms=10_000_000)
    player = Player(own, stage_of(lost), np.random.default_rng(1))
    silent = ground(lost, np.random.default_rng(2), 3).auctions()[0]._replace(told_delay_ms=None)
    moments = (0, 9_000_000, 10_000_001)
    bids = [player.play(silent._replace(at_ms=at_ms)) for at_ms in moments]
    assert bids == [SCALE // 2, -1, SCALE // 2]
    assert player.passes == {"budget_held": 1}


def test_a_daily_budget_begins_anew_with_the_day() -> None:
    """What one day may spend is not passed, and the next has its own."""
    said = market(
        span_ms=3 * 86_400_000, rivals={"law": "uniform", "low": SCALE // 4, "high": SCALE // 4}
    )
    own = config("flat", daily_budget=SCALE, pacing={"method": "none"})
    player = Player(own, stage_of(said), np.random.default_rng(1))
    for auction in ground(said, np.random.default_rng(2), 60).auctions():
        player.play(auction)
        player.end_block()
    won = player.taken.columns.won.reshape(3, 20).sum(axis=1)
    assert won.tolist() == [4, 4, 4]


def test_the_best_fixed_bid_is_that_of_the_same_auctions() -> None:
    """A flat price that is the best one has no regret, and every other has some."""
    said = order(config("flat"), rounds=300, seeds=1)
    path = ground(said["market"], rng_of(said, 0), 300)
    best = best_fixed_bid(path.least, path.worth)
    flat = [
        config("flat", policy={"method": "flat", "price": p}) for p in (best.bid, best.bid // 2)
    ]
    found = played({**order(*flat), "rounds": 300, "seeds": 1})
    regrets = [one["regret"]["mean_nanos"] for one in found["policies"]]
    assert regrets[0] == 0 < regrets[1]
    assert found["policies"][0]["best_fixed"]["surplus"]["mean_nanos"] == best.surplus


@pytest.mark.parametrize("budget", [None, 7, 30])
def test_the_best_fixed_bid_in_first_price(budget: int | None) -> None:
    """It is that of trying every bid; with few tries it is never better than that."""
    rng = np.random.default_rng(4)
    for _ in range(30):
        rivals, values = rng.integers(0, 12, 20), rng.integers(0, 20, 20)
        every = []
        for bid in range(13):
            won = np.flatnonzero(rivals <= bid)
            if budget is not None:
                won = won[bid * np.arange(1, won.size + 1) <= budget]
            every.append(int((values[won] - bid).sum()))
        best = best_fixed_bid(rivals, values, budget=budget, pays_own=True)
        few = best_fixed_bid(rivals, values, budget=budget, pays_own=True, tried_max=2)
        assert best.surplus == max([0, *every])
        assert few.surplus <= best.surplus


def test_figures_over_seeds() -> None:
    """Mean, standard error and the 10 and 90 % ends; one seed has no error."""
    found = figure([1.0, 2.0, 3.0, 4.0, 5.0])
    assert found["mean"] == 3.0
    assert found["error"] == pytest.approx((2.5 / 5) ** 0.5)
    assert (found["low"], found["high"]) == pytest.approx((1.4, 4.6))
    assert money_figure([2.5])["error_nanos"] is None


def test_a_run_sums_up_its_columns() -> None:
    """Curves end where the sums do, with a point for every auction of a short run."""
    said = order(config("flat"), rounds=25, seeds=1)
    player = Player(config("flat"), stage_of(said["market"]), rng_of(said, 0, 0))
    for auction in ground(said["market"], rng_of(said, 0), 25).auctions():
        player.play(auction)
    run = run_of(player.taken.columns, config("flat"), "second")
    assert run.ends.tolist() == list(range(1, 26))
    assert run.spend[-1] == player.taken.columns.paid.sum()
    assert run.wins == player.memory.total.wins + player.taken.columns.won.sum()
