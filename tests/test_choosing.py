"""Who bids where a share of traffic is kept apart, with what chance, and how the log says so."""

from __future__ import annotations

import dataclasses
from typing import Any

import pytest

from service.answer import Answer, Clocks, decision
from service.catalog import Item, PlainRule
from service.choosing import NOTHING, Draw, drawn, odds_below, odds_of
from service.decision.opportunity import Opportunity
from service.decision.price import ready
from service.decision.rule import Sale
from service.guard.control import CONTROL, MAIN, WHOLE, Control
from service.guard.gate import Limits
from service.guard.hand import Hand, SliceInHand
from service.learner.memory import Memory
from tests.decision.invented import CAP, terms

KEY = b"k" * 32
FLAT = ready(Memory.fresh(), terms("flat"))
TREE = ready(Memory.fresh(), terms("exptree"))


def item(share: int | None, *, open: bool = True, price: int = 10) -> Item:
    """A line item with a control share, or without one."""
    plain = None if share is None else PlainRule(Control(share, price), FLAT, open)
    return Item("garden", 1, Limits(CAP, 0, None, frozen=False), FLAT.terms, 0, FLAT, plain)


def hand(amount: int = 10**6) -> Hand:
    """A hand with one slice."""
    held = Hand()
    held.receive(SliceInHand(b"s" * 16, "garden", amount, 1, 0.0, 99.0))
    return held


def asked(name: str | None = "r1", *, test: bool = False) -> Opportunity:
    """An opportunity of this name."""
    return Opportunity("garden", request_id=name, test=test)


def test_without_a_control_share_nothing_is_drawn() -> None:
    """The method bids, and there is no chance to log."""
    assert drawn(item(None), asked(), hand(), KEY) == (None, NOTHING)
    assert NOTHING == Draw(MAIN, None, None)


def test_all_and_none_of_the_traffic() -> None:
    """A whole share chooses everything, an empty one nothing, each with its chance."""
    plain, draw = drawn(item(WHOLE), asked(), hand(), KEY)
    assert (plain is not None, draw) == (True, Draw(CONTROL, 1.0))
    assert drawn(item(0, price=0), asked(), hand(), KEY) == (None, Draw(MAIN, 1.0))


def test_an_arm_without_money_leaves_the_bid_to_the_method() -> None:
    """With chance one, since nothing else could have happened; closed or empty is alike."""
    for one, held in ((item(WHOLE, open=False), hand()), (item(WHOLE), hand(9)), (item(1), Hand())):
        assert drawn(one, asked(), held, KEY) == (None, Draw(MAIN, 1.0))


def test_a_test_needs_no_money() -> None:
    """Nothing is set aside for it, so both arms can be tried without a slice."""
    plain, draw = drawn(item(WHOLE, open=False), asked(test=True), Hand(), KEY)
    assert (plain is not None, draw.arm) == (True, CONTROL)


def test_one_request_is_always_in_the_same_arm() -> None:
    """Asked again it is the same; under another key, or of another name, it may differ."""
    half = item(WHOLE // 2)
    arms = [[drawn(half, asked(f"r{n}"), hand(), KEY)[1].arm for n in range(200)] for _ in "ab"]
    other = [drawn(half, asked(f"r{n}"), hand(), b"o" * 32)[1].arm for n in range(200)]
    assert arms[0] == arms[1] != other


@pytest.mark.parametrize("share", [WHOLE // 10, WHOLE // 2])
def test_as_many_are_chosen_as_the_share_says(share: int) -> None:
    """Of 2,000 names within five standard deviations of a binomial count."""
    count = 2000
    chosen = sum(
        drawn(item(share), asked(f"r{n}"), hand(), KEY)[1].arm == CONTROL for n in range(count)
    )
    chance = share / WHOLE
    assert abs(chosen - count * chance) < 5 * (count * chance * (1 - chance)) ** 0.5


def test_requests_without_a_name_are_units_of_their_own() -> None:
    """Else all of them would lie in one arm."""
    arms = {drawn(item(WHOLE // 2), asked(None), hand(), KEY)[1].arm for _ in range(64)}
    assert arms == {MAIN, CONTROL}


def test_a_chance_belongs_to_prices_drawn_from_a_law_only() -> None:
    """A fixed price has none, and those of a law add up with what lies beneath them."""
    assert (odds_of(FLAT, 3), odds_below(FLAT, 3)) == (None, None)
    assert odds_below(TREE, 1) == pytest.approx(0.0)
    halves = [odds_below(TREE, floor) for floor in (CAP // 4, CAP // 2, CAP)]
    assert halves == sorted(halves, key=lambda one: one or 0.0)
    assert halves[1] == pytest.approx(0.5, abs=0.02)


def row(answer: Answer, sale: Sale | None = None, **said: Any) -> dict[str, Any]:
    """What the log tells of an answer."""
    return decision(answer, Opportunity("garden", **said), sale, 77)


def test_a_bid_is_logged_with_its_hold_and_its_chances() -> None:
    """Price, hold, floor with fees, arm and both chances."""
    draw = Draw(CONTROL, 0.25, 0.125)
    answer = Answer("r1", "garden", 9, None, "t", "x", "mean", "value", 4, 11, draw)
    told = row(answer, Sale("first", "north", 6), floor=5, source="north")
    assert (told["price"], told["held"], told["floor"], told["floor_held"]) == (9, 11, 5, 6)
    assert (told["arm"], told["arm_odds"], told["odds"]) == (CONTROL, 0.25, 0.125)
    assert (told["auction"], told["source"], told["snapshot"]) == ("first", "north", 4)
    assert (told["at_ms"], told["ref"], told["set_by"], told["test"]) == (77, "x", "value", 0)


@pytest.mark.parametrize(("said", "auction"), [({}, ""), ({"auction": "fixed"}, "fixed")])
def test_a_pass_that_nobody_looked_into_says_what_it_knows(
    said: dict[str, Any], auction: str
) -> None:
    """No price, no hold, no chance; and the kind of auction only where the caller told it."""
    told = row(Answer("r1", "garden", None, "paused"), **said)
    assert (told["price"], told["held"], told["floor_held"]) == (None, None, None)
    assert (told["reason"], told["auction"], told["snapshot"]) == ("paused", auction, 0)
    assert (told["arm"], told["arm_odds"], told["odds"]) == (MAIN, None, None)


def test_a_ticket_never_reaches_the_log() -> None:
    """Whoever reads the log could else report outcomes in the exchange's name."""
    told = row(Answer("r1", "garden", 9, None, "the-ticket", "ref"))
    assert "the-ticket" not in told.values()


def test_clocks_without_a_watch_are_never_late() -> None:
    """And as many may wait as is usual."""
    clocks = Clocks(80, 1000)
    assert (clocks.lag_s(), clocks.waiting_max) == (0.0, 200)
    with pytest.raises(dataclasses.FrozenInstanceError):
        clocks.deadline_ms = 1  # type: ignore[misc]
