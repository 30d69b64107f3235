"""The brakes: silent values, as a table, and the learning allowance, at its edge."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from service.decision import posterior
from service.decision.brakes import learning_cost, no_value
from service.decision.counts import Counts
from service.decision.opportunity import Opportunity
from service.decision.price import Proposal, Ready, ready
from service.decision.terms import Terms
from service.learner.memory import Memory
from service.learner.tally import Tally
from tests.decision.invented import CEILING, terms


@pytest.mark.parametrize(
    ("wins", "known", "brakes"),
    [
        (0, 0, False),
        (50, 0, False),
        (51, 0, True),
        (75, 25, False),
        (76, 25, True),
        (300, 100, False),
        (301, 100, True),
        (0, 5, False),
    ],
)
def test_more_than_fifty_and_twice_the_known_is_too_many(
    wins: int, known: int, brakes: bool
) -> None:
    """max(50, 2 x known) wins may await their first word, and values after a reset are no debt."""
    assert no_value(Tally(wins=wins, known=known), terms("kl-ucbid")) is brakes


def test_accruing_values_have_windows_instead() -> None:
    """Under `accrues` a win waits for its window, so waiting wins mean nothing."""
    accruing = dataclasses.replace(terms("kl-ucbid"), arrival="accrues")

    assert not no_value(Tally(wins=10**6), accruing)


def spent(paid: int, of: Terms) -> Ready:
    """A hundred wins that brought a tenth of a ceiling in all, at this cost."""
    tally = Tally(rounds=100, wins=100, paid=paid, known=100, converted=1, amount=CEILING // 10)
    return ready(Memory(base=dataclasses.replace(tally, amount_square=CEILING**2 // 100)), of)


@pytest.mark.parametrize(
    "method",
    ["ucbid", "kl-ucbid", "bernstein-ucbid", "bayes-ucb", "thompson", "posterior-quantile", "mean"],
)
def test_past_the_allowance_no_bid_is_above_the_posterior_mean(method: str) -> None:
    """Of any value method, drawn or not; and one nano of cost less lets go."""
    of = terms(method)
    assert of.allowance is not None
    free = spent(0, of)
    assert free.counts is not None
    mean = float(posterior.mean(free.counts, of))
    edge = math.floor(of.allowance + 100 * mean)
    held, let_go = spent(edge + 1, of), spent(edge, of)
    generator = np.random.default_rng(3)
    bids = [held.propose(Opportunity("a"), generator) for _ in range(200)]

    assert let_go.most is None
    assert all(isinstance(bid, Proposal) and bid.price <= mean for bid in bids)
    at_the_mean = Proposal(math.floor(mean), "allowance")
    assert at_the_mean in bids or method == "mean"
    freed = let_go.at(0.9)
    assert isinstance(freed, Proposal)
    assert freed.set_by != "allowance"


def test_it_lets_go_when_bids_at_the_mean_have_earned_the_loss_back() -> None:
    """Wins below what they are worth shrink the cost until the method's own bids return."""
    of, story, held = terms("kl-ucbid"), Tally(), list[bool]()
    for turn in range(4000):
        snapshot = ready(Memory(base=story), of)
        price = 7_000_000 if snapshot.most is None else 1_000_000
        held.append(snapshot.most is not None)
        worth = CEILING // 4 if turn % 10 == 0 else 0
        story = dataclasses.replace(
            story,
            rounds=story.rounds + 1,
            wins=story.wins + 1,
            paid=story.paid + price,
            known=story.known + 1,
            converted=story.converted + (worth > 0),
            amount=story.amount + worth,
            amount_square=story.amount_square + worth**2,
        )

    first = held.index(True)
    assert of.allowance is not None
    assert False in held[first:]
    assert learning_cost(story, Counts.of(Memory(base=story), of), of) < 1.2 * of.allowance


def test_without_an_allowance_learning_may_cost_anything() -> None:
    """And flat and the laws take no account of it."""
    unlimited = dataclasses.replace(terms("ucbid"), allowance=None)

    assert spent(10**12, unlimited).most is None
    assert spent(10**12, terms("flat")).most is spent(10**12, terms("exptree")).most is None


def test_a_restart_does_not_make_a_feed_look_silent() -> None:
    """Values that a restart forgot were told all the same, so their wins await no word."""
    tally = Tally(wins=1000, known=0, values_seen=1000)

    assert not no_value(tally, terms("kl-ucbid"))
