"""What a configuration becomes, what a change of it asks for, and what kin give."""

from __future__ import annotations

from typing import Any

import pytest

from service.configuring import (
    dangers,
    drawn_otherwise,
    guessed_otherwise,
    merged,
    object_to_change,
    pooled,
    taught_otherwise,
)
from service.errors import NeedsConfirmation
from service.learner.fold import Lesson, fold
from service.learner.memory import Cell, Memory, Prior
from service.learner.rules import Rules
from service.learner.tally import Tally
from tests.builders import CAP, UNIT, line_item

EXPTREE = {"policy": {"method": "exptree"}, "losses": "priced"}


def changed(**value: Any) -> dict[str, Any]:
    """The flat line item with other facts of value."""
    return line_item(value=value)


@pytest.mark.parametrize(
    ("after", "otherwise"),
    [
        (changed(ceiling=1), True),
        (changed(window_ms=1), True),
        (changed(drift={"how": "window", "rounds": 500}), True),
        (changed(change={"action": "flag"}), True),
        (line_item(tripwires={"value_silence_ms": 5}), True),
        (line_item(**EXPTREE), True),
        (changed(delay_mean_ms=7), False),
        (changed(typical=7), False),
        (line_item(policy={"method": "ucbid"}), False),
        (line_item(name="Another", budget=5, allowance=7), False),
    ],
)
def test_what_makes_lessons_be_read_again(after: dict[str, Any], otherwise: bool) -> None:
    """Only what the fold reads; all else moves prices without a refold."""
    assert taught_otherwise(line_item(), after) is otherwise


def test_a_restart_in_place_of_a_flag_reads_again() -> None:
    """What an alarm does is part of the fold."""
    flag, restart = (changed(change={"action": action}) for action in ("flag", "restart"))

    assert taught_otherwise(flag, restart)


@pytest.mark.parametrize(
    ("after", "otherwise"),
    [
        (line_item(**EXPTREE, bid_cap=CAP // 2), True),
        (line_item(**EXPTREE, value={"ceiling": CAP}), True),
        (line_item(policy={"method": "exptree-win-only"}), True),
        (line_item(**EXPTREE, value={"window_ms": 1}), False),
    ],
)
def test_what_gives_a_state_another_law(after: dict[str, Any], otherwise: bool) -> None:
    """Cap, ceiling and method; not how values are waited for."""
    assert drawn_otherwise(line_item(**EXPTREE), after) is otherwise


def test_drift_and_detector_are_replaced_and_value_is_merged() -> None:
    """Seconds of now stand alone, without rounds of before."""
    before = changed(drift={"how": "window", "rounds": 500}, change={"action": "flag", "ratio": 3})
    after = merged(before, {"value": {"drift": {"how": "window", "memory_ms": 9}}})

    assert after["value"]["drift"] == {"how": "window", "memory_ms": 9}
    assert after["value"]["change"] == {"action": "flag", "ratio": 3}
    assert after["value"]["ceiling"] == before["value"]["ceiling"]


@pytest.mark.parametrize(
    ("after", "otherwise"),
    [
        (line_item(kin=["b"]), False),
        (line_item(kin=["b"], budget=5), False),
        (line_item(kin=["c"]), True),
        (line_item(kin=None), True),
        (line_item(kin=["b"], value={"typical": 7}), True),
        (line_item(kin=["b"], value={"expected": {"per_impression": 7, "conversions": 1}}), True),
        (
            line_item(
                kin=["b"], value={"expected": {"per_impression": 4_000_000, "conversions": 9}}
            ),
            False,
        ),
    ],
)
def test_what_takes_the_guess_of_kin_back(after: dict[str, Any], otherwise: bool) -> None:
    """Other kin, none, or a guess of one's own; what it weighs is one's own anyway."""
    assert guessed_otherwise(line_item(kin=["b"]), after) is otherwise
    assert not guessed_otherwise(line_item(), after)


def state(known: int, converted: int, amount: int) -> bytes:
    """A learner's state of these sums."""
    return Memory(base=Tally(known=known, converted=converted, amount=amount)).to_bytes()


def test_kin_pool_their_impressions_as_one() -> None:
    """Ten and thirty impressions, one and four conversions, five hundredths of a unit in all."""
    kin = [
        (line_item(), state(10, 1, 10_000_000)),
        (changed(ceiling=7 * 10**7), state(30, 4, 40_000_000)),
    ]
    entry = pooled(kin, 10**9)

    assert entry is not None
    assert (entry.kind, entry.body) == (
        "prior",
        {
            "per_impression": 50_000_000 // 40,
            "typical": 10_000_000,
            "impressions": 40.0,
            "conversions": 5.0,
        },
    )


def test_kin_count_open_wins_by_their_age() -> None:
    """A sibling whose values are late is not taken for a worthless one."""
    memory = Memory(cells=(Cell(0, bought=10, converted=1, amount=10**7),), clock_ms=60_000)
    accruing = changed(arrival="accrues", delay_mean_ms=30_000, window_ms=60_000)
    entry = pooled([(accruing, memory.to_bytes())], 10**9)

    assert entry is not None
    assert 5.0 < float(entry.body["impressions"]) < 10.0


def test_a_pooled_guess_is_cut_at_the_ceiling() -> None:
    """What siblings are worth may lie above what this one's events can be."""
    entry = pooled([(line_item(), state(2, 2, 10**8))], 1000)

    assert entry is not None
    assert (entry.body["per_impression"], entry.body["typical"]) == (1000, 1000)


@pytest.mark.parametrize("kin", [[], [state(0, 0, 0)], [state(50, 0, 0)]])
def test_kin_that_saw_no_value_give_nothing(kin: list[bytes]) -> None:
    """Fifty worthless impressions are no guess: it would be nothing, and never win."""
    assert pooled([(line_item(), one) for one in kin], 10**9) is None


def test_the_lesson_of_kin_is_the_guess_until_it_is_taken_back() -> None:
    """And an empty lesson takes it back."""
    entry = pooled([(line_item(), state(10, 1, 10_000_000))], 10**9)
    assert entry is not None
    taken, back = Lesson(entry.kind, entry.body, 5), Lesson("prior", {}, 6)
    rules = Rules.from_config(line_item())

    assert fold(Memory.fresh(), [taken], rules).prior == Prior(1_000_000, 10_000_000)
    assert fold(Memory.fresh(), [taken, back], rules).prior is None


@pytest.mark.parametrize(
    ("before", "after", "words"),
    [
        ({}, {"budget": 10 * UNIT - 1}, []),
        ({}, {"budget": 10 * UNIT}, ["budget=10.00"]),
        ({}, {"bid_cap": 3 * CAP - 1}, []),
        ({}, {"bid_cap": 3 * CAP}, ["bid_cap_cpm=24.00"]),
        ({}, {"daily_budget": UNIT}, []),
        ({"daily_budget": UNIT // 10}, {"daily_budget": UNIT}, ["daily_budget=1.00"]),
        ({"daily_budget": UNIT // 10}, {"daily_budget": None}, ["daily_budget=none"]),
        ({"daily_budget": UNIT // 9}, {"daily_budget": None}, []),
        ({"strict": True}, {"strict": False}, ["strict=false"]),
        ({"strict": False}, {"strict": True}, []),
        ({}, {"budget": UNIT // 2, "bid_cap": CAP // 2}, []),
    ],
)
def test_what_may_cost_a_lot_is_named(
    before: dict[str, Any], after: dict[str, Any], words: list[str]
) -> None:
    """Ten times a budget, three times a cap, a daily budget that is gone, strict off."""
    old = line_item(**before)
    assert list(dangers(old, merged(old, after))) == words


def test_learning_cost_and_a_dear_change_are_confirmed_together() -> None:
    """One value holds both words; neither alone does."""
    old = line_item(policy={"method": "ucbid", "gamma": 1.0}, value={"ceiling": UNIT})
    new = merged(old, {"budget": 10 * UNIT})
    with pytest.raises(NeedsConfirmation) as first:
        object_to_change(old, new, None, "a try")
    assert first.value.data["confirm"] == "learning_cost"
    with pytest.raises(NeedsConfirmation) as second:
        object_to_change(old, new, "learning_cost", "a try")
    assert second.value.data["confirm"] == "learning_cost budget=10.00"
    object_to_change(old, new, str(second.value.data["confirm"]), "a try")
