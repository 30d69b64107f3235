"""Seeds played side by side make the same bids as the way of production, one by one."""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np
import pytest

from service.decision.methods import METHODS
from service.rehearsal.lockstep import fits, play_many
from service.rehearsal.player import Player
from service.rehearsal.rehearse import grounds, rng_of, stage_of
from tests.rehearsal.orders import SCALE, config, market, order

SCALAR = sorted(
    name
    for name, method in METHODS.items()
    if method.draw is None and not (method.by_law or method.by_features)
)
CASES: list[dict[str, Any]] = [
    {},
    {"budget": 40 * SCALE},
    {"allowance": SCALE, "budget": 100 * SCALE},
    {"value": {"ceiling": SCALE // 2, "arrival": "once"}},
]


@pytest.mark.parametrize("method", SCALAR)
@pytest.mark.parametrize("case", range(len(CASES)))
@pytest.mark.parametrize("block", [1, 7])
def test_every_bid_is_the_same(method: str, case: int, block: int) -> None:
    """Bids, wins, costs and passes of 2 seeds over 120 auctions, with budgets and a floor."""
    own = config(method, **{"pacing": {"method": "none"}, **CASES[case]})
    said = order(own, market=market(floor=SCALE // 4), rounds=120, seeds=2, block=block)
    stage = stage_of(said["market"])
    assert fits(own, stage)
    together = play_many(own, stage, grounds(said, range(2)), block, lambda count: None)
    passes = Counter[str]()
    for seed, columns in enumerate(together.columns):
        player = Player(own, stage, rng_of(said, seed, 0))
        auctions = grounds(said, [seed])[0].auctions()
        for start in range(0, len(auctions), block):
            for auction in auctions[start : start + block]:
                player.play(auction)
            player.end_block()
        alone = player.taken.columns
        for name in ("bid", "paid", "won", "least", "value", "worth"):
            assert np.array_equal(getattr(alone, name), getattr(columns, name)), name
        passes += player.passes
    assert passes == together.passes


@pytest.mark.parametrize(
    "change",
    [
        {"pacing": {"method": "dual"}, "daily_budget": SCALE},
        {"value": {"drift": {"how": "discount", "rounds": 1000}}},
        {"value": {"hints": True}},
        {"fees": {"share": 10**8, "cpm": 0}},
        {"daily_budget": SCALE},
    ],
)
def test_what_more_than_money_binds_goes_the_other_way(change: dict[str, Any]) -> None:
    """Pacing, forgetting, hints, fees and days are played by the code of production alone."""
    assert not fits(config(**change), stage_of(market()))
    assert fits(config(pacing={"method": "none"}), stage_of(market()))


def test_late_news_goes_the_other_way() -> None:
    """So does first price, where the bid hangs on what is known of rivals."""
    plain = config(pacing={"method": "none"})
    assert not fits(plain, stage_of(market(outcome_delay_ms=1000)))
    assert not fits(plain, stage_of(market(auction="first")))
