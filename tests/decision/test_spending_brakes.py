"""What budget and return target make of a price: by how much, named how, and when not at all."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from service.decision.brakes import NO_BRAKES, Brakes
from service.decision.describing import describe
from service.decision.learnability import defaults
from service.decision.opportunity import Opportunity
from service.decision.price import Passed, Proposal, ready
from service.decision.terms import Terms
from service.learner import pacing, return_target
from service.learner.memory import Memory
from service.learner.pace_part import Pacing, Spending
from service.learner.pacing import UNITS, Pace
from service.learner.parts import PACE, RETURN
from service.learner.profile import Plan, Progress
from service.learner.return_target import Return
from service.learner.tally import Tally
from tests.decision.invented import CAP, CEILING, partial

VALUE = 6_000_000
# The guess outweighs nothing: a hundred wins are known, and their mean is the value.
KNOWN = Tally(
    rounds=500, wins=100, known=100, converted=100, amount=100 * VALUE, amount_square=VALUE**2
)
DAILY = {"daily_budget": 10**9, "budget": 10**12}


def made(wish: dict[str, Any], method: str = "mean") -> Terms:
    """Terms of a line item with a daily budget and no weight on the guess."""
    base = partial(method)
    value = {**base["value"], "expected": {"conversions": 0}}
    return Terms.from_config(defaults({**base, **DAILY, "value": value, **wish})[0])


def paced(mu: int, tally: Tally = KNOWN, daily: int | None = 10**9) -> Memory:
    """A memory whose multiplier stands at mu."""
    spending = Spending("dual", Plan("UTC", daily=daily), VALUE, 60_000)
    state = Pacing(spending, Pace.fresh(spending.rules, mu, 1), Progress(0))
    return Memory(base=tally, parts=((PACE, state.to_bytes()),))


def returned(terms: Terms, level: int, tally: Tally = KNOWN) -> Memory:
    """A memory whose return multiplier stands at e^level."""
    assert terms.returning is not None
    return Memory(base=tally, parts=((RETURN, Return(level).to_bytes(terms.returning)),))


def target(tau: int, *, strict: bool = False) -> dict[str, Any]:
    """A wish for a return of tau."""
    return {"return_target": {"value_per_unit": tau * 10**6, "strict": strict}}


def test_pacing_bids_the_value_over_one_plus_mu_and_says_so() -> None:
    """And the value where mu is 0; rounding is down."""
    terms = made({})
    assert ready(paced(0), terms).answer == Proposal(VALUE, "value")
    assert ready(paced(UNITS // 2), terms).answer == Proposal(VALUE * 2 // 3, "pacing")
    drawn = ready(paced(UNITS // 2), terms).propose(Opportunity("a"), np.random.default_rng(1))
    assert drawn == Proposal(VALUE * 2 // 3, "pacing")


def test_pacing_counts_for_what_is_drawn_too() -> None:
    """The draws of one generator shrink by the same factor, and so do their quantiles."""
    terms = made({}, "thompson")
    free, slow = ready(paced(0), terms), ready(paced(UNITS), terms)
    drawn = [one.propose(Opportunity("a"), np.random.default_rng(7)) for one in (free, slow)]
    assert isinstance(drawn[0], Proposal)
    assert isinstance(drawn[1], Proposal)
    assert drawn[1].price == pytest.approx(drawn[0].price / 2, abs=2)
    assert drawn[1].set_by == "pacing"


def test_without_pacing_or_a_rate_a_multiplier_is_not_read() -> None:
    """Nor is there one before the first lesson."""
    none = made({"pacing": {"method": "none"}})
    assert ready(paced(UNITS), none).answer == Proposal(VALUE, "value")
    assert ready(paced(UNITS, daily=None), made({})).answer == Proposal(VALUE, "value")
    assert ready(Memory(base=KNOWN), made({})).answer == Proposal(VALUE, "value")


def test_cap_and_allowance_set_the_price_only_below_the_paced_bid() -> None:
    """A value far above the cap is named the cap's as long as the paced bid is above it too."""
    dear = replace(KNOWN, amount=100 * 4 * CAP)
    assert ready(paced(UNITS), made({})).answer == Proposal(VALUE // 2, "pacing")
    assert ready(paced(UNITS, dear), made({})).answer == Proposal(CAP, "cap")
    assert ready(paced(7 * UNITS, dear), made({})).answer == Proposal(CAP // 2, "pacing")


def test_a_return_target_bids_by_lambda_and_mu() -> None:
    """v (1 + lambda / tau) / (lambda + mu); a lambda without end bids v / tau."""
    terms = made({**target(3), "pacing": {"method": "none"}})
    assert ready(returned(terms, 16 * UNITS), terms).answer == Proposal(2_000_000, "return_target")
    both = made(target(3))
    assert both.returning is not None
    parts = (*paced(UNITS).parts, (RETURN, Return(0).to_bytes(both.returning)))
    expected = int(VALUE * (1 + 1 / 3) / 2)
    assert ready(Memory(base=KNOWN, parts=parts), both).answer == Proposal(
        expected, "return_target"
    )


def test_the_strict_form_bids_within_what_is_earned() -> None:
    """Worth / tau and a part of the slack; half of it while the target is missed."""
    terms = made({**target(3, strict=True), "pacing": {"method": "none"}})
    prices = [
        ready(returned(terms, 0, replace(KNOWN, paid=paid)), terms).answer
        for paid in (100 * VALUE // 3, 100 * VALUE // 6, 100 * VALUE // 3 + 1)
    ]
    assert prices == [
        Proposal(2_000_000, "return_target"),
        Proposal(3_000_000, "return_target"),
        Proposal(1_000_000, "return_target"),
    ]


def test_a_state_of_another_target_passes_until_it_is_folded_again() -> None:
    """So does a damaged one; nothing is bid on what cannot be read."""
    terms, other = made(target(3)), made(target(4))
    assert ready(returned(other, 0), terms).answer == Passed("learner_halted")
    damaged = Memory(base=KNOWN, parts=((PACE, b"{"),))
    assert ready(damaged, made({})).answer == Passed("learner_halted")


def test_a_brake_that_works_is_named_beside_the_guarantee() -> None:
    """A theorem without budget or target is not shown as if it held with them."""
    words = str(describe(ready(paced(UNITS), made({})))["guarantee"])
    assert words.startswith("No theorem covers this method together with pacing")
    assert "No theorem" not in str(describe(ready(paced(0), made({})))["guarantee"])
    held = made(target(3))
    assert "a return target" in str(describe(ready(returned(held, 0), held))["guarantee"])


def test_no_brakes_give_the_value_back() -> None:
    """The same numbers, not a copy that was divided by one."""
    value = np.array([1.0, CEILING])
    assert NO_BRAKES.bid(value) is value
    rules = return_target.Rules(10**6, pacing.STEP, 10**6)
    assert Brakes(0, rules).bid(value).tolist() == [2.0, 2.0 * CEILING]
