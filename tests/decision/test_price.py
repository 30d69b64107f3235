"""From a snapshot to an answer: rounding, the cap, the brake, and what is shown."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from service.decision.describing import describe
from service.decision.opportunity import Opportunity
from service.decision.price import Passed, Proposal, Ready, ready
from service.decision.terms import Terms
from service.learner.memory import Memory
from service.learner.tally import Tally
from tests.decision.invented import CAP, CEILING, config, terms, with_value

EARLY = Tally(
    rounds=100, wins=40, known=40, converted=2, amount=2 * CEILING, amount_square=2 * CEILING**2
)


def made(tally: Tally, of: Terms) -> Ready:
    """A snapshot of these sums alone, made ready."""
    return ready(Memory(base=tally), of)


def test_bids_round_down() -> None:
    """A mean of 200 / 3 nanos bids 66, never 67."""
    base = config("mean")
    plain = Terms.from_config(with_value(base, expected={"conversions": 0}))
    tally = Tally(rounds=3, wins=3, known=3, converted=1, amount=200, amount_square=40_000)

    assert made(tally, plain).answer == Proposal(66, "value")


def test_the_cap_is_named_when_it_sets_the_price() -> None:
    """Before the first value the published bound bids the ceiling, so the cap sets the price."""
    assert made(Tally(), terms("kl-ucbid")).answer == Proposal(CAP, "cap")


def test_a_value_at_the_cap_is_the_value() -> None:
    """A price that only equals the cap was not moved by it."""
    assert made(Tally(), terms("flat", price=CAP)).answer == Proposal(CAP, "value")


def test_the_opportunity_does_not_move_the_price() -> None:
    """Floor and features are for the guard and for later methods."""
    snapshot, generator = made(EARLY, terms("posterior-quantile")), np.random.default_rng(1)
    plain = snapshot.propose(Opportunity("a"), generator)
    other = snapshot.propose(Opportunity("a", floor=CAP, features={"hour": 3}), generator)

    assert plain == other


def test_silent_values_hold_buying_back() -> None:
    """Under `once`, fifty wins may wait for their first word, the fifty-first may not."""
    fifty, more = Tally(rounds=60, wins=50), Tally(rounds=60, wins=51)

    assert isinstance(made(fifty, terms("kl-ucbid")).answer, Proposal)
    assert made(more, terms("kl-ucbid")).answer == Passed("no_value")
    assert describe(made(more, terms("kl-ucbid")))["pass"] == "no_value"


def test_a_flat_price_needs_no_values() -> None:
    """A method that learns nothing from values is not held back for want of them."""
    silent = Tally(rounds=60, wins=1000)

    assert isinstance(made(silent, terms("flat")).answer, Proposal)


@pytest.mark.parametrize("method", ["ucbid", "mean", "posterior-quantile"])
def test_a_state_out_of_range_is_no_price(method: str) -> None:
    """Sums beyond what a float can hold pass the opportunity instead of pricing it."""
    broken = Tally(rounds=10, wins=10, known=10, converted=1, amount=10**400)
    snapshot = made(broken, terms(method))

    assert snapshot.answer == Passed("learner_halted")
    assert describe(snapshot)["bid_nanos"] is None


def test_what_is_shown() -> None:
    """Mean, interval, bid and what set it, all in nanos, with the published source."""
    learnt = describe(made(EARLY, terms("ucbid")))

    assert learnt["mean_nanos"] == 2 * CEILING // 40
    assert learnt["bid_nanos"] == CAP
    assert learnt["set_by"] == "cap"
    assert "Weed, Perchet, Rigollet" in str(learnt["source"])
    assert "at every moment at once" in str(learnt["interval"])


def test_a_bound_above_the_money_spent_says_nothing_yet() -> None:
    """Theorem 1 is shown in money only once it is smaller than what was paid."""
    poor = EARLY
    rich = dataclasses.replace(poor, rounds=10**7, paid=10**13)

    assert "says nothing yet" in str(describe(made(poor, terms("ucbid")))["guarantee"])
    # 3 + 2 sqrt(6e7 ln 1e7) = 62199.004 ceilings of 0.10, by the formula.
    assert "at most 6219.90" in str(describe(made(rich, terms("ucbid")))["guarantee"])
