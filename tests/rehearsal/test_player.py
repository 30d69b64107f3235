"""One line item at play: its purse, its news and its figures, a few auctions at a time by hand."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as limits
from hypothesis import strategies as some

from service.rehearsal.player import AT_ONCE_MS, Auction, Player, Stage, staged
from service.rehearsal.taken import PASSED
from tests.rehearsal.orders import SCALE, config

DAY_MS = 86_400_000
HALF = SCALE // 2  # The flat price of these policies.


def player(
    auction: str = "second", at_once: bool = True, method: str = "flat", **changes: Any
) -> Player:
    """A line item without pacing on a day's stage."""
    own = config(method, **{"pacing": {"method": "none"}, **changes})
    return Player(own, Stage(auction, DAY_MS, at_once), np.random.default_rng(5))


def sold(at_ms: int, least: int, value: int | None = 0, **more: Any) -> Auction:
    """One auction of which the least bid that wins is known."""
    return Auction(at_ms, least, value, value or 0, **more)


@pytest.mark.parametrize(
    ("most_lost", "least_won", "answers"),
    [
        (None, None, {4: False, 5: True, 6: True}),
        (4, None, {4: False, 5: None, 9: None}),
        (None, 8, {7: None, 8: True, 9: True}),
        (4, 8, {4: False, 5: None, 7: None, 8: True}),
    ],
)
def test_who_wins_is_said_where_it_is_known(
    most_lost: int | None, least_won: int | None, answers: dict[int, bool | None]
) -> None:
    """At the told price the bid wins; between two limits nobody can say."""
    one = Auction(0, 5, None, 0, most_lost=most_lost, least_won=least_won)
    assert {bid: one.won_by(bid) for bid in answers} == answers
    assert one.told is (most_lost is None and least_won is None)


@given(least=some.integers(0, 50), bids=some.lists(some.integers(0, 60), min_size=2, max_size=9))
def test_a_higher_bid_never_loses_what_a_lower_one_wins(least: int, bids: list[int]) -> None:
    """Winning rises with the bid: once it is won it stays won."""
    won = [Auction(0, least, None, 0).won_by(bid) for bid in sorted(bids)]
    assert won == sorted(won, key=bool)


def test_a_staged_flight_is_the_rehearsal() -> None:
    """Its end is moved to the end of the stage, its kind of auction and its kin are the stage's."""
    own = config(flight={"starts_ms": 7, "ends_ms": 9, "time_zone": "UTC"}, kin="others")
    found = staged(own, Stage("first", 1000, False, 50))
    assert found["flight"] == {"starts_ms": 50, "ends_ms": 1050, "time_zone": "UTC"}
    assert (found["auction"], found["spend_on"], found["kin"]) == ("first", "won", None)
    assert found["tripwires"] is None
    assert own["flight"]["ends_ms"] == 9


def test_a_flight_without_end_stays_without_end() -> None:
    """Pacing would hurry to an end that nobody set."""
    assert staged(config(), Stage("second", 1000, False))["flight"]["ends_ms"] is None


@pytest.mark.parametrize(("at_once", "window_ms"), [(True, AT_ONCE_MS), (False, 604_800_000)])
def test_windows_close_at_once_only_where_values_come_at_once(
    at_once: bool, window_ms: int
) -> None:
    """Else they stay as the line item has them."""
    found = staged(config(), Stage("second", 1000, at_once))
    assert found["value"]["window_ms"] == window_ms


@pytest.mark.parametrize(
    ("auction", "least", "paid"),
    [
        ("second", HALF - 1, HALF - 1),
        ("second", HALF, HALF),
        ("second", HALF + 1, 0),
        ("first", 1, HALF),
        ("first", HALF + 1, 0),
    ],
)
def test_a_win_costs_what_its_auction_says(auction: str, least: int, paid: int) -> None:
    """The competing bid in second price, the own in first, nothing for a loss."""
    one = player(auction)
    assert one.play(sold(1, least)) == HALF
    columns = one.taken.columns
    assert columns.paid.tolist() == [paid]
    assert columns.won.tolist() == [least <= HALF]


def test_fees_are_paid_on_top_of_the_price() -> None:
    """A tenth and 5 nanos on top: a price of 100 costs 115, and the bid leaves net of both."""
    one = player(fees={"share": 10**8, "cpm": 5})
    assert one.play(sold(1, 100)) == (HALF - 5) * 10 // 11
    assert one.taken.columns.paid.tolist() == [115]


def test_a_spent_budget_ends_the_bidding() -> None:
    """Three wins at 0.4 leave nothing of 1.2, and the pass says which money is gone."""
    one = player(budget=12 * SCALE // 10)
    bids = [one.play(sold(at, 4 * SCALE // 10)) for at in range(1, 5)]
    assert bids == [HALF, HALF, 4 * SCALE // 10, PASSED]
    assert dict(one.passes) == {"budget_spent": 1}


def test_a_held_budget_says_held() -> None:
    """While a bid is open its hold binds the money, and when it is lost it comes back."""
    one = player(at_once=False, budget=HALF)
    late = sold(1, SCALE, told_delay_ms=100)
    assert one.play(late) == HALF
    assert one.play(sold(50, SCALE)) == PASSED
    assert dict(one.passes) == {"budget_held": 1}
    assert one.play(sold(101, SCALE)) == HALF


def test_a_hold_comes_back_at_the_moment_of_its_news() -> None:
    """A millisecond before it is still held."""
    for at_ms, bid in ((100, PASSED), (101, HALF)):
        one = player(at_once=False, budget=HALF)
        one.play(sold(1, SCALE, told_delay_ms=100))
        assert one.play(sold(at_ms, SCALE)) == bid


@pytest.mark.parametrize("told_delay_ms", [None, 900_001])
def test_news_after_grace_is_no_news(told_delay_ms: int | None) -> None:
    """Never and too late are alike: counted, its cost in no budget, its hold back after grace."""
    one = player(at_once=False, budget=HALF)
    one.play(sold(1, SCALE // 4, told_delay_ms=told_delay_ms))
    assert (one.taken.untold, one.taken.untold_paid) == (1, SCALE // 4)
    assert one.play(sold(900_000, SCALE)) == PASSED
    assert one.play(sold(900_001, SCALE)) == HALF


def test_news_at_the_end_of_grace_still_counts() -> None:
    """A delay of just the grace is told, and its cost is booked."""
    one = player(at_once=False, budget=HALF)
    one.play(sold(1, SCALE // 4, told_delay_ms=900_000))
    assert one.taken.untold == 0
    assert one.play(sold(900_001, SCALE)) == HALF - SCALE // 4


def test_a_day_has_its_own_money() -> None:
    """What the day's budget keeps back one day is there on the next."""
    one = player(at_once=False, daily_budget=HALF)
    assert one.play(sold(1, HALF)) == HALF
    assert one.play(sold(DAY_MS - 1, 0)) == PASSED
    assert one.play(sold(DAY_MS, HALF)) == HALF


def test_the_reason_of_a_pass_is_that_of_production() -> None:
    """A spent day says so; a day that is only held, or all the money, has another word."""
    one = player(at_once=False, daily_budget=HALF, budget=SCALE)
    one.play(sold(1, HALF, told_delay_ms=10))
    assert one.play(sold(5, 0)) == PASSED
    assert one.play(sold(11, 0)) == PASSED
    assert dict(one.passes) == {"budget_held": 1, "day_spent": 1}
    one.play(sold(DAY_MS, HALF))
    assert one.play(sold(DAY_MS + 1, 0)) == PASSED
    assert one.passes["budget_spent"] == 1


def test_a_day_begins_in_the_zone_of_the_line_item() -> None:
    """In Auckland, thirteen hours ahead in January, midnight is at 11 in the morning of UTC."""
    zone = {"starts_ms": 0, "ends_ms": None, "time_zone": "Pacific/Auckland"}
    one = player(at_once=False, daily_budget=HALF, flight=zone)
    hour_ms = 3_600_000
    start_ms = 1_767_225_600_000  # 2026-01-01T00:00Z.
    assert one.play(sold(start_ms, HALF)) == HALF
    assert one.play(sold(start_ms + 11 * hour_ms - 1, 0)) == PASSED
    assert one.play(sold(start_ms + 11 * hour_ms, HALF)) == HALF


def test_a_bid_under_the_floor_passes_and_costs_nothing() -> None:
    """It is counted with its reason; a bid at the floor is made."""
    one = player()
    assert one.play(sold(1, HALF + 1, floor=HALF + 1)) == PASSED
    assert one.play(sold(2, HALF, floor=HALF)) == HALF
    assert dict(one.passes) == {"under_floor": 1}
    assert one.taken.columns.won.tolist() == [False, True]


def test_an_unknown_outcome_costs_nothing_and_teaches_nothing() -> None:
    """Neither won nor lost: its hold comes back and the memory stays as it was."""
    one = player(at_once=False, budget=HALF)
    before = one.memory.to_bytes()
    assert one.play(Auction(1, 5, 7, 7, most_lost=3)) == HALF
    one.end_block()
    assert one.memory.to_bytes() == before
    assert one.play(sold(2, SCALE)) == HALF
    assert one.taken.columns.unknown.tolist() == [True, False]


def test_learning_waits_for_the_next_snapshot() -> None:
    """Within a block all bids come from one snapshot; after it the bid has moved."""
    one = player(method="mean", value={"expected": {"per_impression": HALF, "conversions": 1}})
    first = [one.play(sold(at, 1, SCALE)) for at in range(1, 6)]
    assert len(set(first)) == 1
    one.end_block()
    assert one.play(sold(6, 1, SCALE)) > first[0]


def test_a_memory_is_carried_on() -> None:
    """A player that is given what another has learnt bids as that one does."""
    own = config("mean", pacing={"method": "none"})
    stage = Stage("second", DAY_MS, True)
    first = Player(own, stage, np.random.default_rng(1))
    for at in range(1, 20):
        first.play(sold(at, 1, SCALE if at % 2 else 0))
    first.end_block()
    second = Player(own, stage, np.random.default_rng(1), first.memory)
    fresh = Player(own, stage, np.random.default_rng(1))
    auction = sold(30, SCALE)
    assert second.bid(auction) == first.bid(auction)
    assert second.bid(auction) != fresh.bid(auction)


amounts = some.integers(0, SCALE)


@limits(max_examples=30)
@given(
    budget=some.integers(1, 3 * SCALE),
    rows=some.lists(some.tuples(amounts, some.integers(0, 50)), min_size=1, max_size=12),
    auction=some.sampled_from(["second", "first"]),
)
def test_money_never_exceeds_the_budget(
    budget: int, rows: list[tuple[int, int]], auction: str
) -> None:
    """Whatever comes and however late it is told, costs stay within the budget."""
    one = player(auction, at_once=False, budget=budget)
    for at_ms, (least, delay_ms) in enumerate(rows, start=1):
        one.play(sold(at_ms, least, told_delay_ms=delay_ms))
    columns = one.taken.columns
    assert columns.paid.sum() <= budget
    assert (columns.paid[~columns.won] == 0).all()
    assert (columns.bid <= SCALE).all()


@limits(max_examples=15)
@given(rows=some.lists(some.tuples(amounts, amounts), min_size=1, max_size=8))
def test_within_a_block_order_teaches_nothing(rows: list[tuple[int, int]]) -> None:
    """Told at once, a block is one moment: turned around it leads to the same next bid."""
    bids = []
    for order in (rows, rows[::-1]):
        one = player(method="mean")
        for at_ms, (least, value) in enumerate(order, start=1):
            one.play(sold(at_ms, least, value))
        one.end_block()
        bids.append(one.bid(sold(100, SCALE)))
    assert bids[0] == bids[1]


@pytest.mark.parametrize("method", ["thompson", "flat", "kl-ucbid", "posterior-quantile"])
def test_a_seed_plays_the_same(method: str) -> None:
    """Bids of two players from one seed are the same, drawn or not."""
    played = []
    for _ in range(2):
        one = player(method=method)
        for at in range(1, 60):
            one.play(sold(at, SCALE // 3, SCALE if at % 3 == 0 else 0))
            if at % 10 == 0:
                one.end_block()
        played.append(one.taken.columns.bid.tolist())
    assert played[0] == played[1]
