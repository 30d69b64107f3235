"""What is certain and what is bounded: both worked tables, every row by brute force, and money."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.rehearsal.alternatives import Alternative
from service.rehearsal.auction_log import Logged
from service.rehearsal.hindsight_bounds import (
    BOUNDED,
    EXACT,
    NOTHING,
    OPEN,
    Bound,
    Purse,
    Sums,
    bounded,
    shown,
    summed,
)

UNIT = 100  # The worked tables are in hundredths of the ceiling.
# Bid, price (None for a loss) and value.
LOG = [(50, 30, 80), (50, 45, 20), (50, None, 0), (20, None, 0), (70, 10, 60)]


def log(auction: str) -> list[Logged]:
    """The worked log, in second price or with the own bid paid."""
    rows = []
    for bid, price, value in LOG:
        if price is None:
            rows.append(Logged(auction, bid, "lost", UNIT))
        else:
            paid = price if auction == "second" else bid
            rows.append(Logged(auction, bid, "won", value, value, price=paid))
    return rows


SECOND = [
    (10, 0, 0, 5),
    (35, 0.13, 0.36, 4),
    (50, 0.05, 0.31, 4),
    (60, -0.09, 0.41, 3),
    (90, -0.21, 0.41, 3),
]
FIRST = [(10, 0, 0.26, 2), (50, -0.1, 0.12, 3), (60, -0.28, 0.12, 2), (90, -0.58, -0.18, 3)]


@pytest.mark.parametrize(
    ("auction", "price", "low", "high", "exact"),
    [("second", *row) for row in SECOND] + [("first", *row) for row in FIRST],
)
def test_the_worked_tables(auction: str, price: int, low: float, high: float, exact: int) -> None:
    """Mean surplus over five auctions, with values from 0 to 1, and how many are exact."""
    found = summed(log(auction), Alternative("flat", price))
    assert (found.low / 5 / UNIT, found.high / 5 / UNIT) == pytest.approx((low, high))
    assert found.counts[EXACT] == exact
    assert found.exact_share == exact / 5


@pytest.mark.parametrize(("price", "low", "high"), [(60, 0.11, 0.21), (90, -0.01, 0.21)])
def test_the_worked_table_with_unknown_values_fixed(price: int, low: float, high: float) -> None:
    """At one half each the interval narrows as worked out by hand."""
    found = summed(log("second"), Alternative("flat", price), unseen=(50, 50))
    assert (found.low / 5 / UNIT, found.high / 5 / UNIT) == pytest.approx((low, high))


prices = some.integers(1, 12)


@given(
    some.sampled_from(["second", "first"]),
    *(some.integers(0, 12), some.integers(0, 10), some.integers(0, 12), some.integers(0, 6)),
    *(some.booleans(), prices, prices, some.sampled_from(["flat", "cap", "floor", "method"])),
)
def test_no_truth_leaves_its_limits(
    auction: str, bid: int, value: int, rival: int, floor: int, told: bool, cap: int, price: int,
    kind: str,
) -> None:  # fmt: skip
    """Whatever rival, value and bid were, what the alternative really earns is inside."""
    bid = min(bid, cap)
    row, alternative = _told(auction, bid, value, rival, floor, told), _other(kind, price, cap)
    found = bounded(alternative.seen(row), alternative.bids(row))
    floor = price if kind == "floor" else floor
    lowest, highest = (row.bid, row.bid) if kind == "floor" else alternative.bids(row)
    for other in range(lowest, highest + 1):
        earned, cost = _earned(auction, other, value, rival, floor)
        if other == rival != bid and not told and other > floor:
            continue  # Who wins a tie nobody says.
        assert found.low <= earned <= found.high
        assert found.cost_low <= cost <= found.cost_high
        assert found.win_low <= (other >= max(rival, floor, 1)) <= found.win_high
        if found.kind == EXACT:
            assert found.low == found.high == earned


def _other(kind: str, price: int, cap: int) -> Alternative:
    price = min(price, cap) if kind == "flat" else price
    return Alternative(kind, price, cap)  # type: ignore[arg-type]


def _told(auction: str, bid: int, value: int, rival: int, floor: int, told: bool) -> Logged:
    least = max(rival, floor, 1)
    if bid < floor or bid == 0:
        return Logged(auction, 0, "passed", 10, floor=floor, reason="under_floor")
    if bid < least:
        return Logged(auction, bid, "lost", 10, floor=floor, least=least if told else None)
    paid = max(rival, floor) if auction == "second" else bid
    said = least if told else None
    return Logged(auction, bid, "won", value, value, floor=floor, price=paid, least=said)


def _earned(auction: str, bid: int, value: int, rival: int, floor: int) -> tuple[int, int]:
    if bid < max(rival, floor, 1):
        return 0, 0
    paid = max(rival, floor) if auction == "second" else bid
    return value - paid, paid


def test_a_lower_bid_is_always_exact_in_second_price() -> None:
    """Every one below the logged bid, whoever won."""
    for price in range(1, 20):
        assert summed(log("second"), Alternative("flat", price)).counts[BOUNDED] == 0


def test_a_fixed_price_is_taken_or_left() -> None:
    """From the price on it is bought at the price; what was left may be worth anything."""
    taken = Logged("fixed", 40, "won", 70, 70, floor=40, price=40)
    left = Logged("fixed", 0, "passed", UNIT, floor=40, reason="under_floor")
    assert summed([taken], Alternative("flat", 39)).high == 0
    assert summed([taken], Alternative("flat", 90)).low == 30
    found = summed([left], Alternative("flat", 50))
    assert (found.low, found.high, found.cost) == (-40, 60, (0, 40))


def test_a_raised_floor_is_exact_and_a_lowered_one_is_not() -> None:
    """Between floor and rival the floor is paid; below the floor nobody was told the rival."""
    won = Logged("second", 50, "won", 80, 80, floor=20, price=30)
    assert summed([won], Alternative("floor", 40)).low == 40
    assert summed([won], Alternative("floor", 51)).high == 0
    at_floor = Logged("second", 50, "won", 80, 80, floor=20, price=20)
    lowered = summed([at_floor], Alternative("floor", 5))
    assert (lowered.low, lowered.high, lowered.wins) == (60, 75, (1, 1))


def test_a_window_that_is_open_is_certain_but_not_closed() -> None:
    """The outcome counts as exact, its value as still open, and both ends are said."""
    found = summed([Logged("second", 50, "won", 90, 10, price=30)], Alternative("flat", 40))
    assert (found.low, found.high, found.counts[OPEN]) == (-20, 60, 1)
    assert (found.exact_share, found.exact) == (1.0, 0)


def test_passes_that_no_price_would_have_changed_are_no_auctions() -> None:
    """Frozen or late is frozen or late at any price; out of money is not."""
    frozen = Logged("second", 0, "passed", UNIT, reason="frozen")
    broke = Logged("second", 0, "passed", UNIT, reason="budget_held")
    assert summed([frozen], Alternative("flat", 50)).auctions == 0
    found = summed([broke], Alternative("flat", 50))
    assert (found.low, found.high, found.counts[BOUNDED]) == (-50, 100, 1)


def test_an_alternative_that_may_run_out_may_have_stopped() -> None:
    """From the first win that may not be paid each later one may be nothing; before it none."""
    rows = [Logged("second", 50, "won", v, v, price=30) for v in (80, 10, 80)]
    free = summed(rows, Alternative("flat", 40))
    assert (free.low, free.high, free.cut) == (80, 80, 0)
    tight = summed(rows, Alternative("flat", 40), Purse(60))
    assert (tight.low, tight.high, tight.cut) == (30, 80, 1)
    daily = summed(rows, Alternative("flat", 40), Purse(daily=30))
    assert (daily.low, daily.high, daily.cut) == (30, 100, 2)


def test_the_answer_names_units_and_counts() -> None:
    """Totals as amounts, means as CPM, and how many stand behind each."""
    said = shown(summed(log("second"), Alternative("flat", 60)))
    assert said["surplus"] == {"low_nanos": -45, "high_nanos": 205}
    assert said["surplus_per_auction"] == {"low_cpm_nanos": -9, "high_cpm_nanos": 41}
    assert said["bounded"] == {"auctions": 2}
    assert shown(summed([], Alternative("flat", 60)))["exact"] == {
        **{"auctions": 0, "share": None, "of_which_value_still_open": 0, "surplus_nanos": 0}
    }


@pytest.mark.parametrize("bids", [(0, 0), (10, 20), (50, 50)])
def test_a_bid_that_loses_for_sure_is_nothing(bids: tuple[int, int]) -> None:
    """Up to the bid that lost, and exactly so."""
    assert bounded(Logged("second", 50, "lost", UNIT), bids) == NOTHING


@pytest.mark.parametrize(
    ("row", "bids", "bound"),
    [
        (
            Logged("second", 50, "won", 80, 80, price=30),
            (40, 60),
            Bound(EXACT, 50, 50, 30, 30, 1, 1),
        ),
        (
            Logged("second", 50, "won", 80, 10, price=30),
            (40, 60),
            Bound(OPEN, -20, 50, 30, 30, 1, 1),
        ),
        (
            Logged("second", 50, "won", 80, 80, price=30),
            (20, 60),
            Bound(BOUNDED, 0, 50, 0, 30, 0, 1),
        ),
        (
            Logged("second", 50, "won", 20, 20, price=30),
            (20, 60),
            Bound(BOUNDED, -10, 0, 0, 30, 0, 1),
        ),
        (Logged("second", 50, "lost", UNIT), (60, 60), Bound(BOUNDED, -60, 50, 0, 60, 0, 1)),
        (
            Logged("second", 50, "lost", UNIT, least=55),
            (60, 60),
            Bound(BOUNDED, -55, 45, 55, 55, 1, 1),
        ),
        (Logged("first", 50, "lost", UNIT), (60, 60), Bound(BOUNDED, -60, 40, 0, 60, 0, 1)),
        (
            Logged("first", 50, "won", 80, 80, price=50),
            (60, 60),
            Bound(EXACT, 20, 20, 60, 60, 1, 1),
        ),
    ],
)
def test_one_opportunity_by_hand(row: Logged, bids: tuple[int, int], bound: Bound) -> None:
    """Surplus, cost and win, each with its least and its most."""
    assert bounded(row, bids) == bound


def test_a_purse_knows_when_money_may_have_ended() -> None:
    """60 and 40 are there of 100; one nano more, or a third of one, may not be."""
    row = Logged("second", 50, "lost", UNIT, day="one")
    purse = Purse(100)
    assert [purse.may_be_out(row, cost) for cost in (60, 40, 0, 1, 0)] == [
        *(False, False, False),
        *(True, True),
    ]


def test_a_day_has_a_purse_of_its_own() -> None:
    """What may be spent on one day takes nothing from the next but from all of them."""
    one, two = (Logged("second", 50, "lost", UNIT, day=day) for day in ("one", "two"))
    purse = Purse(100, daily=50)
    assert not purse.may_be_out(one, 50)
    assert purse.may_be_out(one, 1)
    assert not purse.may_be_out(two, 49)
    assert purse.left == 0


@given(some.lists(some.tuples(prices, prices), min_size=1, max_size=12))
def test_parts_of_a_log_add_up(pairs: list[tuple[int, int]]) -> None:
    """Without a limit of money two halves of a log come to what the whole does."""
    rows = [
        Logged("second", bid, "won", 12, 12, price=rival)
        if rival < bid
        else Logged("second", bid, "lost", 12)
        for bid, rival in pairs
    ]
    other, half = Alternative("flat", 7), len(pairs) // 2
    whole = summed(rows, other)
    parts = summed(rows[:half], other), summed(rows[half:], other)
    for name in ("low", "high", "exact", "auctions"):
        assert getattr(whole, name) == sum(getattr(part, name) for part in parts)
    assert whole.low <= whole.exact + sum(one.low - one.exact for one in parts) <= whole.high


def test_sums_of_nothing_have_no_share() -> None:
    """None of none is no share, and neither is there a mean."""
    sums = Sums()
    assert (sums.auctions, sums.exact_share) == (0, None)
    sums.add(Bound(BOUNDED, -5, 5), out=False)
    assert sums.exact_share == 0.0
