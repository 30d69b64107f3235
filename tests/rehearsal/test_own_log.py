"""A line item's own log: what is exact is used, what is bounded is counted, nothing is made up."""

from __future__ import annotations

from typing import Any

import pytest

from service.guard.fees import NONE, Fees
from service.rehearsal.own_log import Logged, auctions, mean_value
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
