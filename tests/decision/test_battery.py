"""One battery of checks for every method, so that a new one is held to all of them."""

from __future__ import annotations

import copy
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.price import Passed, Proposal, ready
from service.learner.fold import fold
from service.learner.tally import Tally
from tests.decision.invented import CAP, CEILING, terms

every_method = pytest.mark.parametrize("method", sorted(METHODS))
OPPORTUNITY = Opportunity("alpine-season-pass", floor=400_000, features={"hour": 13})
Entry = tuple[str, dict[str, Any]]


def proposed(tally: Tally, method: str) -> Proposal | Passed:
    """What the service would be told on this snapshot."""
    return ready(tally, terms(method)).propose(OPPORTUNITY, np.random.default_rng(1))


def of_wins(known: int, converted: int, amount_each: int, rounds: int | None = None) -> Tally:
    """A tally in which every win is known."""
    return Tally(
        rounds=known if rounds is None else rounds,
        wins=known,
        paid=known * CAP // 2,
        known=known,
        converted=converted,
        amount=converted * amount_each,
        amount_square=converted * amount_each**2,
    )


tallies = some.builds(
    lambda known, share, amount, more: of_wins(known, round(share * known), amount, known + more),
    some.integers(0, 10**9),
    some.floats(0.0, 1.0),
    some.integers(1, CEILING),
    some.integers(0, 10**9),
)
wins = some.tuples(
    some.just("won"),
    some.fixed_dictionaries(
        {"price": some.integers(0, CAP), "bid": some.just(CAP), "round": some.integers(0, 1)}
    ),
)
values = some.tuples(
    some.just("value"),
    some.fixed_dictionaries({"amount": some.integers(0, 2 * CEILING), "was": some.none()}),
)
streams = some.lists(wins | values, max_size=40)


@every_method
def test_it_works_before_the_first_lesson(method: str) -> None:
    """A fresh line item has a price above nothing and not above the cap."""
    answer = proposed(Tally.fresh(), method)

    assert isinstance(answer, Proposal)
    assert 0 < answer.price <= CAP


@every_method
@given(tally=tallies)
def test_the_price_is_whole_nanos_between_nothing_and_the_cap(method: str, tally: Tally) -> None:
    """Whatever was learnt, a price is an int from 0 to the cap and says what set it."""
    answer = proposed(tally, method)

    assert isinstance(answer, Proposal)
    assert type(answer.price) is int
    assert 0 <= answer.price <= CAP
    assert answer.set_by in {"value", "cap"}
    assert answer.set_by == "value" or answer.price == CAP


@every_method
@pytest.mark.parametrize("known", [0, 1, 2, 10**9])
@pytest.mark.parametrize("share", [0, 1])
@pytest.mark.parametrize("amount", [1, CEILING])
def test_extreme_tallies_give_finite_prices(
    method: str, known: int, share: int, amount: int
) -> None:
    """Nothing known, one lesson, a thousand million of them, all worthless or at the ceiling."""
    tally = of_wins(known, share * known, amount)
    answer = proposed(tally, method)
    learnt = ready(tally, terms(method)).describe()

    assert isinstance(answer, Proposal)
    assert 0 <= answer.price <= CAP
    assert isinstance(learnt["low_nanos"], int)
    assert isinstance(learnt["high_nanos"], int)
    assert 0 <= learnt["low_nanos"] <= learnt["high_nanos"] <= CEILING


@every_method
@given(rows=streams, chance=some.randoms(use_true_random=False))
def test_the_order_of_lessons_moves_no_price(method: str, rows: list[Entry], chance: Any) -> None:
    """The same lessons in any order lead to the same answer."""
    other = list(rows)
    chance.shuffle(other)
    one, two = (fold(Tally.fresh(), some_rows, CEILING, "once") for some_rows in (rows, other))

    assert proposed(one, method) == proposed(two, method)


@every_method
@given(one=streams, two=streams)
def test_merged_parts_are_priced_as_the_whole(
    method: str, one: list[Entry], two: list[Entry]
) -> None:
    """Two workers' parts merged give the price of one fold over both."""
    parts = [fold(Tally.fresh(), rows, CEILING, "once") for rows in (one, two)]
    whole = fold(Tally.fresh(), [*one, *two], CEILING, "once")

    assert proposed(parts[0].merge(parts[1]), method) == proposed(whole, method)


@every_method
@given(tally=tallies)
def test_a_state_read_back_gives_the_same_price(method: str, tally: Tally) -> None:
    """What another process reads from bytes is priced alike."""
    assert proposed(Tally.from_bytes(tally.to_bytes()), method) == proposed(tally, method)


@every_method
def test_the_same_inputs_give_the_same_price_and_stay_as_they_were(method: str) -> None:
    """Asking twice changes neither the answer nor anything that was passed in."""
    rows: list[Entry] = [
        ("won", {"price": 5, "bid": 9, "round": 1}),
        ("value", {"amount": 2 * CEILING, "was": None}),
    ]
    kept, tally = copy.deepcopy(rows), of_wins(40, 3, CEILING // 2)
    state, generator = tally.to_bytes(), np.random.default_rng(3)
    answers = [
        ready(fold(tally, rows, CEILING, "once"), terms(method)).propose(OPPORTUNITY, generator)
        for _ in range(2)
    ]

    assert answers[0] == answers[1]
    assert rows == kept
    assert tally.to_bytes() == state


@every_method
@given(tally=tallies)
def test_it_can_be_described(method: str, tally: Tally) -> None:
    """The state page gets the method's name, source, assumptions and what is proved."""
    learnt = ready(tally, terms(method)).describe()

    assert learnt["method"] == method
    assert all(learnt[name] for name in ("source", "assumptions", "guarantee", "interval"))


@every_method
def test_a_correction_after_a_reset_leaves_a_price(method: str) -> None:
    """A correction of what a reset forgot leaves sums below zero, and still a sound price."""
    rows: list[Entry] = [
        ("value", {"amount": CEILING, "was": None}),
        ("reset", {}),
        ("value", {"amount": 0, "was": CEILING}),
    ]
    tally = fold(Tally.fresh(), rows, CEILING, "once")

    assert tally.amount < 0
    assert proposed(tally, method) == proposed(Tally.fresh(), method)
