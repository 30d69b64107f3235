"""What a price depends on, read from a configuration; the settings' ranges; the bidding rules."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.decision.method import Setting
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.rule import OF_SALE, RULES, Sale, fixed_price, sale_of, second_price
from service.decision.saying import bound_in_words
from service.decision.spending import spending_fault, usual_pacing
from service.decision.terms import WINDOW_MS, Terms
from service.learner.memory import Prior
from service.learner.rules import Drift
from service.learner.tally import Tally
from tests.decision.invented import CAP, CEILING, config, partial, terms

OPEN = Setting(0.5, 0.0, 1.0)
CLOSED = Setting(5, 1, 10, open_ended=False, whole=True)
CHOICE = Setting(32, 1, 100, open_ended=False, whole=True, choices=(16, 32))


@pytest.mark.parametrize(
    ("setting", "given", "fault"),
    [
        (OPEN, 0.5, None),
        (OPEN, 1e-12, None),
        (OPEN, 0, "x must lie between, but not at, 0 and 1."),
        (OPEN, 1.0, "x must lie between, but not at, 0 and 1."),
        (OPEN, -3, "x must lie between, but not at, 0 and 1."),
        (OPEN, float("nan"), "x must be a finite number."),
        (OPEN, "0.5", "x must be a finite number."),
        (OPEN, True, "x must be a finite number."),
        (CLOSED, 1, None),
        (CLOSED, 10, None),
        (CLOSED, 0, "x must lie between 1 and 10."),
        (CLOSED, 11, "x must lie between 1 and 10."),
        (CLOSED, 5.0, "x must be an integer."),
        (CHOICE, 16, None),
        (CHOICE, 17, "x must be one of: 16, 32."),
        (CHOICE, False, "x must be an integer."),
    ],
)
def test_a_setting_says_what_is_wrong_with_a_number(
    setting: Setting, given: object, fault: str | None
) -> None:
    """Its kind first, then its choices, then its range and whether the ends belong to it."""
    assert setting.fault("x", given) == fault


@pytest.mark.parametrize("name", sorted(METHODS))
def test_every_default_is_within_its_own_range(name: str) -> None:
    """And a setting without one must be said."""
    for path, setting in METHODS[name].settings.items():
        if setting.default is not None:
            assert setting.fault(path, setting.default) is None


def test_terms_are_read_from_a_configuration() -> None:
    """Defaults filled in; what is optional has the meaning of nothing."""
    read = terms("kl-ucbid")
    assert (read.currency, read.auction, read.cap, read.ceiling) == ("EUR", "second", CAP, CEILING)
    assert (read.method, read.arrival, read.window_ms) == ("kl-ucbid", "once", WINDOW_MS)
    assert (read.drift, read.on_change, read.tree, read.returning) == (None, None, None, None)
    assert (read.hints, read.paced, read.strict_return) == (False, False, False)
    assert read.scale == float(CEILING)


@pytest.mark.parametrize(
    ("value", "member", "found"),
    [
        ({"window_ms": 5}, "window_ms", 5),
        ({"delay_mean_ms": 7}, "delay_mean_ms", 7),
        ({"change": {"action": "flag"}}, "on_change", "flag"),
        ({"change": None}, "on_change", None),
        ({"hints": True}, "hints", True),
        (
            {"drift": {"how": "window", "rounds": 9, "memory_ms": None}},
            "drift",
            Drift("window", "rounds", 9),
        ),
        (
            {"drift": {"how": "discount", "rounds": None, "memory_ms": 8}},
            "drift",
            Drift("discount", "time", 8),
        ),
    ],
)
def test_each_fact_of_the_value_has_its_place(
    value: dict[str, Any], member: str, found: object
) -> None:
    """Under its own name, in its own unit."""
    base = config("mean")
    read = Terms.from_config({**base, "value": {**base["value"], **value}})
    assert getattr(read, member) == found


@pytest.mark.parametrize(
    ("conversions", "typical", "expected", "impressions"),
    [(1.0, 20, 4, 5.0), (0.0, 20, 4, 0.0), (2.5, 10, 10, 2.5), (1.0, 1, 4, 0.25)],
)
def test_a_guess_weighs_its_conversions_at_the_guessed_rate(
    conversions: float, typical: int, expected: int, impressions: float
) -> None:
    """One conversion of 20 at 4 per impression is what five impressions bring."""
    base = terms("mean")
    one = dataclasses.replace(
        base, prior_conversions=conversions, typical=typical, expected=expected
    )
    assert one.prior_impressions == impressions


def test_a_guess_of_kin_takes_the_place_of_the_configured_one() -> None:
    """Cut at the ceiling, which may have been lowered since; without one nothing changes."""
    base = terms("mean")
    assert base.guided(None) is base
    guided = base.guided(Prior(per_impression=3, typical=2))
    assert (guided.typical, guided.expected) == (2, 3)
    high = base.guided(Prior(2 * CEILING, 3 * CEILING))
    assert (high.typical, high.expected) == (CEILING, CEILING)


@pytest.mark.parametrize(
    ("said", "auction", "sale"),
    [
        ({}, "second", Sale("second", "default", 0)),
        ({"floor": 5}, "first", Sale("first", "default", 5)),
        ({"floor": 5, "auction": "first"}, "second", Sale("first", "default", 5)),
        ({"price": 9}, "second", Sale("second", "default", 0)),
        ({"price": 9}, "fixed", Sale("fixed", "default", 9)),
        ({"price": 9, "floor": 12}, "fixed", Sale("fixed", "default", 12)),
        ({"auction": "fixed"}, "second", Sale("fixed", "default", 0)),
        ({"source": "north"}, "second", Sale("second", "north", 0)),
    ],
)
def test_the_sale_an_opportunity_stands_for(said: dict[str, Any], auction: str, sale: Sale) -> None:
    """Its own kind before the line item's; a price binds only where it is fixed."""
    assert sale_of(Opportunity("a", **said), auction) == sale


@pytest.mark.parametrize(
    ("value", "floor", "cap", "bid"),
    [
        (10, 10, 20, 10),
        (11, 10, 20, 10),
        (9, 10, 20, 9),
        (30, 10, 10, 10),
        (30, 10, 9, 30),
        (5, 0, 20, 5),
    ],
)
def test_a_fixed_price_is_taken_where_value_and_cap_reach_it(
    value: int, floor: int, cap: int, bid: int
) -> None:
    """At just its price; otherwise the value stays what it is, and is beneath or is cut."""
    sale = Sale("fixed", "north", floor)
    assert fixed_price(value, sale, cap, None) == bid  # type: ignore[arg-type]


@given(some.lists(some.floats(0, 1e12), min_size=1, max_size=9))
@settings(max_examples=40, deadline=None)
def test_in_a_second_price_auction_the_value_is_bid(values: list[float]) -> None:
    """Vickrey, The Journal of Finance 16(1), 1961: any other bid is never better."""
    array = np.array(values)
    for rival in (0.0, float(np.median(array)), 1e12):
        truthful = np.where(second_price(array) > rival, array - rival, 0.0)
        for factor in (0.5, 0.9, 1.1, 2.0):
            other = np.where(factor * array > rival, array - rival, 0.0)
            assert (truthful >= other).all()


def test_every_kind_of_auction_has_a_rule() -> None:
    """And only the truthful one is simple enough for whole arrays."""
    assert set(OF_SALE) == {"second", "first", "fixed"}
    assert set(RULES) == {"second"}


@pytest.mark.parametrize(
    ("method", "changes", "pacing"),
    [
        ("mean", {}, "none"),
        ("mean", {"daily_budget": 1}, "dual"),
        ("mean", {"flight": {"ends_ms": 1}}, "dual"),
        ("mean", {"flight": {"ends_ms": None}}, "none"),
        ("mean", {"flight": None}, "none"),
        ("flat", {"daily_budget": 1}, "none"),
        ("exptree", {"daily_budget": 1}, "none"),
        ("linear", {"daily_budget": 1}, "dual"),
    ],
)
def test_pacing_is_usual_where_there_is_a_rate_to_hold_to(
    method: str, changes: dict[str, Any], pacing: str
) -> None:
    """A flat price is an order, and the odds of a law must not be moved."""
    assert usual_pacing({**partial(method), **changes}) == pacing
    unknown = {**partial(method), "policy": {"method": "guess"}, "daily_budget": 1}
    assert usual_pacing(unknown) == "none"


@pytest.mark.parametrize("name", sorted(METHODS))
def test_what_is_usual_is_never_a_fault(name: str) -> None:
    """A line item that says nothing of pacing must not be refused for it."""
    base = {**partial(name), "daily_budget": 1}
    paced = {**base, "pacing": {"method": usual_pacing(base)}}
    assert spending_fault(paced, METHODS[name]) is None


def test_a_bound_is_told_in_money_or_said_to_say_nothing() -> None:
    """At what was spent it begins to say something; every number has its currency."""
    one, tally = terms("mean"), Tally(rounds=12_345, paid=2_500_000_000)
    assert bound_in_words("Theorem 1 of X", 2_500_000_000, tally, one) == (
        "Theorem 1 of X: expected loss against the best fixed bid at most 2.50 EUR over "
        "12,345 rounds."
    )
    assert bound_in_words("Theorem 1 of X", 2_500_000_001, tally, one) == (
        "Theorem 1 of X says nothing yet: its bound over 12,345 rounds is 2.500000001 EUR, "
        "more than the 2.50 EUR spent so far."
    )
