"""How lessons are read: what of a configuration it depends on, and the spans cells cover."""

from __future__ import annotations

from typing import Any

import pytest

from service.learner.rules import CELLS, Drift, MarketRules, Rules, drift_of, tree_rules
from tests.decision.invented import CAP, CEILING, config, with_value

DAY_MS = 86_400_000


def test_a_configuration_without_wishes() -> None:
    """No forgetting, no detector, no tree, and windows that never stand still."""
    rules = Rules.from_config(config("ucbid"))

    market = MarketRules.of(CAP, priced=True)
    assert rules == Rules(CEILING, "once", 604_800_000, "won", market=market)


def test_every_wish_is_read() -> None:
    """Drift, detector, silence and billing."""
    drift, change = {"how": "window", "rounds": 700, "memory_ms": None}, {"action": "restart"}
    base = with_value(config("ucbid"), drift=drift, change=change, ceiling=50 * CAP)
    rules = Rules.from_config(
        {**base, "spend_on": "billed", "tripwires": {"value_silence_ms": 5000}}
    )

    assert rules.drift == Drift("window", "rounds", 700)
    assert (rules.ratio, rules.alarm, rules.restarts) == (2.0, 8.0, True)
    assert (rules.silence_ms, rules.paid_by, rules.rare) == (5000, "billed", True)


@pytest.mark.parametrize(
    ("said", "drift"),
    [
        (None, None),
        ({"how": "discount", "rounds": 9, "memory_ms": None}, Drift("discount", "rounds", 9)),
        ({"how": "window", "rounds": None, "memory_ms": 7}, Drift("window", "time", 7)),
    ],
)
def test_drift_is_by_rounds_or_by_time(said: dict[str, Any] | None, drift: Drift | None) -> None:
    """By whichever of the two is named."""
    assert drift_of(said) == drift


@pytest.mark.parametrize(("how", "horizon"), [("window", 1000), ("discount", 14_000)])
def test_a_discount_remembers_fourteen_spans(how: str, horizon: int) -> None:
    """exp(-14) is under a millionth; a window ends where it ends."""
    drift = Drift(how, "rounds", 1000)

    assert (drift.horizon, drift.piece) == (horizon, horizon // CELLS)
    assert Drift(how, "rounds", 1).piece == 1


def test_cells_follow_the_shorter_of_window_and_memory() -> None:
    """Forgetting by hours needs finer cells than a window of weeks."""
    rules = Rules(CEILING, window_ms=64 * DAY_MS)
    fast = Rules(CEILING, window_ms=64 * DAY_MS, drift=Drift("window", "time", 64 * 1000))
    by_rounds = Rules(CEILING, window_ms=64 * DAY_MS, drift=Drift("window", "rounds", 640))

    assert (rules.cell_ms, fast.cell_ms, by_rounds.cell_ms) == (DAY_MS, 1000, DAY_MS)
    assert Rules(CEILING, window_ms=1).cell_ms == 1


@pytest.mark.parametrize(
    ("method", "win_only"), [("exptree", False), ("exptree-win-only", True), ("ucbid", None)]
)
def test_only_two_methods_grow_a_tree(method: str, win_only: bool | None) -> None:
    """Their game is that of cap and ceiling; another cap is another game."""
    rules = tree_rules(config(method))

    assert (None if rules is None else rules.win_only) is win_only
    if rules is not None:
        assert (rules.ticks.top, rules.ceiling) == (CAP, CEILING)
        assert tree_rules({**config(method), "bid_cap": CAP // 2}) != rules
