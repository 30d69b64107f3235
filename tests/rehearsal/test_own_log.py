"""A line item's own log: what is exact is used, what is bounded is counted, nothing is made up."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.guard.fees import NONE, Fees
from service.rehearsal.own_log import Logged, auctions, mean_value, says
from service.rehearsal.playing import played
from tests.rehearsal.orders import SCALE, config, market, order

WON = Logged(10, "a", 0, 50, "won", 30, None, "second", 12, 90, 20)
LOST = Logged(20, "a", 5, 50, "lost", None, None, "second", 22)
TOLD = Logged(30, "a", 0, 50, "lost", None, 70, "second", 31)
FIRST = Logged(40, "a", 0, 50, "won", 50, None, "first", 41, 10, 60)
SILENT = Logged(50, "a", 8)


@pytest.mark.parametrize(
    ("row", "wins", "loses", "unknown"),
    [
        (WON, [30, 60], [29], []),
        (TOLD, [70], [69], []),
        (LOST, [], [50, 5], [51, 1000]),
        (FIRST, [50, 60], [], [49, 1]),
        (SILENT, [], [7], [8, 1000]),
    ],
)
def test_what_is_known_of_each(
    row: Logged, wins: list[int], loses: list[int], unknown: list[int]
) -> None:
    """A price that was told decides every bid, a bare loss only bids up to it."""
    auction = auctions([row], NONE)[0]
    assert [auction.won_by(bid) for bid in wins] == [True] * len(wins)
    assert [auction.won_by(bid) for bid in loses] == [False] * len(loses)
    assert [auction.won_by(bid) for bid in unknown] == [None] * len(unknown)


def test_values_are_known_where_they_were_seen() -> None:
    """Elsewhere the mean stands in the figures, and is marked as not known."""
    rows = auctions([WON, LOST], NONE)
    assert mean_value([WON, LOST, FIRST]) == 50
    assert (rows[0].value, rows[1].value) == (90, None)
    assert rows[1].worth == 90
    assert (rows[0].told_delay_ms, rows[0].value_delay_ms) == (2, 10)


def test_fees_come_off() -> None:
    """The stream is gross, an auction is net."""
    fees = Fees(10**8, 0)
    row = Logged(10, "a", 0, 1100, "won", 550, None, "second", 12, 90)
    assert auctions([row], fees)[0].least == 500


def replayed(rows: list[Logged], price: int) -> dict[str, Any]:
    """What a flat price makes of a log."""
    own = config("flat", policy={"method": "flat", "price": price})
    said = market(kind="own_log", values={"law": "recorded"}, outcome_delay_ms=1)
    names = Logged.__slots__
    log = [{name: getattr(row, name) for name in names} for row in rows]
    asked = {**order(own, market=said, seeds=1), "log": log, "log_fees": None}
    found: dict[str, Any] = played(asked, lambda count: None)
    return found


def test_a_replay_counts_what_it_cannot_know() -> None:
    """At the logged bid all is exact; above it the bare loss is left out and counted."""
    low, high = (replayed([WON, LOST, TOLD], price)["policies"][0] for price in (50, 60))
    assert low["wins"]["mean"] == high["wins"]["mean"] == 1
    assert low["surplus"]["mean_nanos"] == 60
    assert low["auctions_of_unknown_outcome"]["mean"] == 0
    assert high["auctions_of_unknown_outcome"]["mean"] == 1
    dear = replayed([WON, LOST, TOLD], SCALE // 2)["policies"][0]
    assert dear["wins"]["mean"] == 2
    assert dear["wins_of_unknown_value"]["mean"] == 1
    # Of the second win only the price is known, so its surplus is no part of the exact one.
    assert (dear["surplus_exact"]["mean_nanos"], dear["surplus"]["mean_nanos"]) == (60, 80)
    assert dear["regret"] is None


def test_it_says_what_is_exact_and_what_is_assumed() -> None:
    """Both lists are there and not the same."""
    found = replayed([WON], 50)
    assert any("told" in line for line in found["exact"])
    assert any("do not answer" in line for line in found["assumed"])


@pytest.mark.parametrize(
    ("row", "least", "most_lost", "least_won"),
    [
        (Logged(1, "a", 0, 50, "won", 30), 30, None, None),
        (Logged(1, "a", 40, 50, "won", 30), 40, None, None),  # The floor had to be reached.
        (Logged(1, "a", 0, 50, "won", 50, None, "first"), 50, None, 50),
        (Logged(1, "a", 0, 50, "won", 50, 33, "first"), 33, None, None),
        (Logged(1, "a", 0, 50, "lost"), 51, 50, None),
        (Logged(1, "a", 70, 50, "lost"), 70, 50, None),
        (Logged(1, "a", 0, 50, "lost", None, 70), 70, None, None),
        (Logged(1, "a", 20, 50, "void"), 20, 19, None),
        (Logged(1, "a", 20, 50), 20, 19, None),
        (Logged(1, "a", 0), 0, 0, None),
    ],
)
def test_the_limits_of_each_row(
    row: Logged, least: int, most_lost: int | None, least_won: int | None
) -> None:
    """What was told is the price; what was not lies beyond a bid, or beyond the floor."""
    (found,) = auctions([row], NONE)
    assert (found.least, found.most_lost, found.least_won) == (least, most_lost, least_won)


@given(some.lists(some.integers(0, 1000), max_size=12))
def test_time_never_goes_back(moments: list[int]) -> None:
    """Rows keep their order; one that is a little early is put where the last one was."""
    found = auctions([Logged(at_ms, "a", 0) for at_ms in moments], NONE)
    at_ms = [one.at_ms for one in found]
    assert at_ms == sorted(at_ms)
    assert all(put >= said for put, said in zip(at_ms, moments, strict=True))


def test_news_of_before_the_auction_is_news_at_once() -> None:
    """Clocks of two machines may differ; a delay is never below nothing."""
    row = Logged(100, "a", 0, 50, "won", 30, None, "second", 90, 7, 80)
    (found,) = auctions([row], NONE)
    assert (found.told_delay_ms, found.value_delay_ms) == (0, 0)


@pytest.mark.parametrize(
    ("values", "mean"), [([], 0), ([None], 0), ([10], 10), ([10, None, 21], 16), ([0, 0, 1], 0)]
)
def test_the_mean_is_over_values_that_were_seen(values: list[int | None], mean: int) -> None:
    """A win of unknown value is not a win of nothing; rounding goes half to even."""
    assert mean_value([Logged(1, "a", 0, 5, "won", 1, value=one) for one in values]) == mean


def test_a_value_without_a_win_is_not_believed() -> None:
    """It is neither in the mean nor in the auction."""
    row = Logged(1, "a", 0, 50, "lost", value=90)
    assert mean_value([row]) == 0
    assert auctions([row], NONE)[0].value is None


@given(bid=some.integers(1, 10**12), share=some.integers(0, 10**9), flat=some.integers(0, 100))
def test_the_bid_that_won_wins_again(bid: int, share: int, flat: int) -> None:
    """Gross in the stream and net in the auction, the same bid has the same outcome."""
    fees = Fees(share, flat)
    gross = fees.gross(bid)
    (won,) = auctions([Logged(1, "a", 0, gross, "won", gross, None, "first")], fees)
    (lost,) = auctions([Logged(1, "a", 0, gross, "lost")], fees)
    assert won.won_by(bid) is True
    assert lost.won_by(bid) is False
    assert lost.won_by(bid + 1) is None


def test_an_empty_log_is_replayed_to_nothing() -> None:
    """Nothing was, and it says what it would have assumed all the same."""
    assert auctions([], NONE) == []
    assert says([])["decisions"] == 0
    assert replayed([], 10)["auctions"] == 0
