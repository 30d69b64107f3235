"""What people read of certainty: every claim beside what it assumes, and where it ends."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from service.decision.describing import describe, mean_interval
from service.decision.methods import METHODS
from service.decision.price import ready
from service.decision.terms import Terms
from service.learner import count_sequences
from service.learner.memory import Cell, Memory, Prior
from service.learner.tally import Tally
from service.learner.watch import FIRST
from tests.decision.invented import CAP, CEILING, config, with_value

SEEN = Tally(
    rounds=1000,
    wins=400,
    losses=600,
    paid=400 * CAP // 4,
    known=400,
    converted=20,
    amount=20 * CEILING,
    amount_square=20 * CEILING**2,
)
NO_THEOREM = "No theorem covers"


def shown(memory: Memory, method: str = "ucbid", **value: Any) -> dict[str, Any]:
    """What is shown of a memory under a method and these facts of value."""
    of = Terms.from_config(with_value(config(method), **value))
    return describe(ready(memory, of))


def test_the_mean_of_bounded_values_has_the_interval_of_shares() -> None:
    """Twenty ceilings in four hundred: the beta-binomial limits, which hold at every moment."""
    said = shown(Memory(base=SEEN))
    low, high = count_sequences.bernoulli_interval(20.0, 400.0, 0.05, 1000.0)

    assert said["mean_nanos"] == CEILING // 20
    assert said["low_nanos"] == pytest.approx(float(low) * CEILING, abs=1)
    assert said["high_nanos"] == pytest.approx(float(high) * CEILING, abs=1)
    assert "at every moment at once" in said["interval"]


def test_rare_values_are_counted() -> None:
    """With a ceiling of more than twenty caps: Poisson limits of the rate times the mean."""
    rare = {"ceiling": 100 * CAP, "typical": CEILING, "expected": {"per_impression": CAP // 2}}
    of = Terms.from_config(with_value(config("posterior-quantile"), **rare))
    made = ready(Memory(base=SEEN), of)
    assert made.counts is not None
    low, high, words = mean_interval(made.counts, of)

    assert "how often an impression bought brings something" in words
    assert 0 < low < CEILING / 20 < high < 100 * CAP


def test_the_win_rate_has_an_interval_too() -> None:
    """400 of 1,000, with what it assumes."""
    rate = shown(Memory(base=SEEN))["win_rate"]

    assert rate["low"] < rate["share"] == 0.4 < rate["high"]
    assert "assumes a share that does not change" in rate["interval"]
    assert shown(Memory())["win_rate"] | {"interval": ""} == {
        **{"share": None, "low": 0.0, "high": 1.0},
        "interval": "",
    }


@pytest.mark.parametrize("method", sorted(METHODS))
def test_every_method_says_where_it_is_from_and_what_it_assumes(method: str) -> None:
    """In whole sentences, before and after lessons."""
    for memory in (Memory(), Memory(base=SEEN)):
        said = shown(memory, method)
        for name in ("source", "assumptions", "guarantee", "learning_cost_is", "allowance_says"):
            assert len(str(said[name])) > 5, name
        assert said["unit"].startswith("EUR per impression")


@pytest.mark.parametrize("method", ["ucbid", "exptree", "exptree-win-only"])
def test_a_bound_that_says_nothing_yet_shows_its_numbers(method: str) -> None:
    """The bound and what was spent, so that one sees how far it is off."""
    said = shown(Memory(base=SEEN), method)["guarantee"]

    assert "says nothing yet" in said
    assert "over 1,000 rounds" in said
    assert "more than the 0.80 EUR spent so far" in said


def test_what_learning_has_cost_is_told_with_its_allowance() -> None:
    """0.80 paid for 400 impressions; under a guess of one conversion they are worth 1.94."""
    said = shown(Memory(base=SEEN), "mean")
    worth = 400 * (said["guess"]["typical_nanos"] + 20 * CEILING)
    impressions = said["guess"]["typical_nanos"] / said["guess"]["per_impression_nanos"] + 400

    assert said["learning_cost_nanos"] == pytest.approx(SEEN.paid - worth / impressions, abs=1)
    assert "bids are the method's own" in said["allowance_says"]
    dear = shown(Memory(base=replace(SEEN, paid=10**12)), "mean")
    assert "no bid is above the posterior mean" in dear["allowance_says"]
    assert dear["guarantee"].startswith(NO_THEOREM)
    assert "takes no account of an allowance" in shown(Memory(), "exptree")["allowance_says"]


@pytest.mark.parametrize(
    ("value", "words"),
    [
        ({"drift": {"how": "discount", "rounds": 500}}, "forgetting the old"),
        ({"change": {"action": "restart"}}, "beginning afresh after an alarm"),
    ],
)
def test_no_theorem_covers_a_combination(value: dict[str, Any], words: str) -> None:
    """It is said, and what would hold without it."""
    said = shown(Memory(base=SEEN), "kl-ucbid", **value)["guarantee"]

    assert said.startswith(f"{NO_THEOREM} this method together with {words}.")
    assert "Without: " in said
    assert not shown(Memory(base=SEEN), "kl-ucbid")["guarantee"].startswith(NO_THEOREM)


def test_an_interval_says_what_it_does_not_cover() -> None:
    """Forgetting, a restart, and open windows counted by their age."""
    memory = Memory(base=SEEN, cells=(Cell(0, bought=5),), clock_ms=10, began_ms=3)
    drift = {"how": "discount", "rounds": 500}
    words = shown(memory, arrival="accrues", drift=drift)["interval"]

    assert words.endswith(
        "no theorem covers it with forgetting the old and beginning afresh after an alarm and "
        "counting open windows by their age"
    )


def test_values_told_once_may_be_the_better_ones() -> None:
    """Impressions of which no word has come are left out, and the interval says so."""
    said = shown(Memory(base=replace(SEEN, wins=430)))

    assert said["awaited"] == 30
    assert said["interval"].endswith("leaving out impressions of which no word has come")
    assert shown(Memory(base=SEEN))["interval"].endswith("one unchanging mean")


@pytest.mark.parametrize(
    ("memory", "value", "words"),
    [
        (Memory(), {"delay_mean_ms": 5000}, "configured"),
        (Memory(), {}, "not identified"),
        (Memory(base=SEEN, delays=2, delay_sum_ms=10), {}, "not identified"),
        (Memory(base=SEEN, delays=20, delay_sum_ms=20 * 60_480_000), {}, "fitted"),
    ],
)
def test_where_the_delay_is_from(memory: Memory, value: dict[str, Any], words: str) -> None:
    """Configured, fitted, or not identified: a legal answer early on."""
    said = shown(replace(memory, clock_ms=10**9), arrival="accrues", **value)

    assert words in said["delay"]["says"]
    assert said["delay"]["mean_s"] > 0


def test_values_told_once_have_no_delay_to_show() -> None:
    """It would move no price."""
    assert shown(Memory(base=SEEN))["delay"] is None


def test_a_change_is_shown_by_its_age() -> None:
    """In seconds of service time, and with what it does."""
    watch = FIRST._replace(alarms=2, changed_ms=4000)
    memory = Memory(base=SEEN, clock_ms=10_000, watch=watch)

    assert shown(memory, change={"action": "flag"})["change"] == {
        "found": 2,
        "last_began_ago_s": 6.0,
        "says": "a change is only shown here",
    }
    assert shown(Memory())["change"]["says"] == "no change is looked for"


def test_a_guess_says_who_gave_it_and_whether_it_moves_bids() -> None:
    """Kin or the configuration; a published bound takes no guess."""
    kin = shown(Memory(prior=Prior(CAP // 2, CEILING)), "thompson")["guess"]

    assert (kin["per_impression_nanos"], kin["from"], kin["moves_bids"]) == (CAP // 2, "kin", True)
    assert shown(Memory())["guess"]["from"] == "configuration"
    assert shown(Memory(), "ucbid")["guess"]["moves_bids"] is False


def test_draws_are_shown_by_their_spread() -> None:
    """Tenth, median and nine tenths in order, and only where prices are drawn."""
    for method in ("thompson", "exptree"):
        spread = shown(Memory(base=SEEN), method)["spread"]
        tenth, median, most = (spread[name] for name in sorted(spread, key=spread.__getitem__))
        assert 0 <= tenth < median < most <= CAP
    assert shown(Memory(base=SEEN), "ucbid")["spread"] is None


def test_a_tree_shows_what_could_not_teach_it() -> None:
    """A fresh one is one interval without lessons; value methods have none."""
    assert shown(Memory(), "exptree-win-only")["tree"] == {
        "intervals": 1,
        "lessons": 0,
        "lessons_since_weights_began": 0,
        "outcomes_no_bid_could_beat": 0,
        "outcomes_without_law_or_price": 0,
    }
    assert shown(Memory(), "ucbid")["tree"] is None
