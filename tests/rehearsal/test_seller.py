"""A seller who learns its floor comes to the best one, against bidders who bid their values.

Bidders with independent uniform values: the best floor is 1/2 for any number of them, and the
revenue there (2n / (n + 1)) (1 - r^(n + 1)) - (1 - r^n), 5/12 for two (Krishna, "Auction Theory").
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as limits
from hypothesis import strategies as some

from service.learner.shading import equilibrium_revenue
from service.rehearsal.seller import LearningSeller

TOP = 1_000_000
LENGTHS = (20_000, 60_000, 200_000)


@lru_cache
def sell(bidders: int, rounds: int, seed: int = 1) -> tuple[LearningSeller, list[int], np.ndarray]:
    """The seller after so many auctions, its floors in order, and what each auction brought."""
    bids = np.sort(np.random.default_rng(seed).integers(0, TOP, (rounds, bidders)), axis=1)
    seller, floors, brought = LearningSeller(bidders, rounds, TOP), list[int](), np.zeros(rounds)
    for turn, (second, first) in enumerate(bids[:, -2:].tolist()):
        floor = seller.floor
        floors.append(floor)
        brought[turn] = max(second, floor) if first >= floor else 0
        seller.saw(second)
    return seller, floors, brought / TOP


@pytest.mark.parametrize("bidders", [2, 3, 5])
def test_the_best_floor_is_found(bidders: int) -> None:
    """After 60,000 auctions what looks best is within 0.04 of 1/2, for any number of bidders."""
    seller, _, _ = sell(bidders, 60_000)
    assert seller.best / TOP == pytest.approx(0.5, abs=0.04)


def test_the_floor_rises_towards_the_best_and_never_falls() -> None:
    """It starts at 0, rises from stage to stage, stays under 1/2, and ends nearer after longer."""
    ends = []
    for rounds in LENGTHS:
        seller, floors, _ = sell(2, rounds)
        assert floors[0] == 0
        assert (np.diff(floors) >= 0).all()
        ends.append(seller.floor / TOP)
    assert ends == sorted(ends)
    assert 0.2 < ends[-1] <= 0.52


def test_regret_per_auction_falls() -> None:
    """Against the best floor it loses less per auction the longer it sells."""
    best = float(equilibrium_revenue(2, 0.5))
    assert best == pytest.approx(5 / 12)
    losses = [best - sell(2, rounds)[2].mean() for rounds in LENGTHS]
    assert losses == sorted(losses, reverse=True)
    assert losses[-1] < 0.8 * losses[0]


def test_it_hears_nothing_below_its_own_floor() -> None:
    """Two sellers whose second bids differ only below the floor go on alike."""
    sellers = [LearningSeller(2, 100_000, TOP) for _ in range(2)]
    rng = np.random.default_rng(3)
    for second in np.sort(rng.integers(0, TOP, (99_000, 2)), axis=1)[:, 0].tolist():
        floor = sellers[0].floor
        sellers[0].saw(second)
        sellers[1].saw(second if second > floor else 0)
    assert sellers[0].floor == sellers[1].floor > 0


def test_a_new_seller_asks_for_nothing() -> None:
    """It has to see what bids are before it may ask for more than 0."""
    seller = LearningSeller(2, 1000, TOP)
    assert (seller.floor, seller.best) == (0, 0)


@pytest.mark.parametrize("rounds", [0, 1, 2])
def test_a_season_too_short_to_learn_keeps_its_floor(rounds: int) -> None:
    """Without a whole stage before the last nothing is ever decided."""
    seller = LearningSeller(2, rounds, TOP)
    for _ in range(5):
        seller.saw(TOP)
    assert seller.floor <= TOP


@limits(max_examples=25)
@given(
    bidders=some.integers(2, 6),
    bids=some.lists(some.integers(0, 2 * TOP), min_size=1, max_size=120),
)
def test_a_floor_never_falls_and_never_passes_the_top(bidders: int, bids: list[int]) -> None:
    """Whatever is bid, also above the top it reckons with."""
    seller, before = LearningSeller(bidders, len(bids), TOP), 0
    for bid in bids:
        seller.saw(bid)
        assert before <= seller.floor <= TOP
        assert seller.floor <= seller.best <= TOP or seller.best == 0
        before = seller.floor


@given(bids=some.lists(some.integers(0, TOP), min_size=40, max_size=40))
def test_within_a_stage_order_does_not_matter(bids: list[int]) -> None:
    """The first stage of 900 auctions is 30 long, and only the law of what was seen counts."""
    first, other = LearningSeller(2, 900, TOP), LearningSeller(2, 900, TOP)
    stage = bids[:30]
    for bid in stage:
        first.saw(bid)
    for bid in sorted(stage, reverse=True):
        other.saw(bid)
    assert (first.floor, first.best) == (other.floor, other.best)


def test_where_all_bid_alike_no_floor_is_needed() -> None:
    """The second bid already pays 0.7 of the top, so a floor of nothing stays among the best."""
    seller = LearningSeller(2, 20_000, TOP)
    for _ in range(20_000):
        seller.saw(7 * TOP // 10)
    assert seller.floor == 0
    assert seller.best <= 7 * TOP // 10
