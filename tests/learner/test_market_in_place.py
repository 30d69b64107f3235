"""Outcomes counted in the bytes of a state leave the bytes of a state that was read whole."""

from __future__ import annotations

import numpy as np
import pytest

from service.learner import market_part
from service.learner.curve_counts import SEEN
from service.learner.lesson import Lesson
from service.learner.market_in_place import MarketBytes
from service.learner.market_state import MarketState, UnreadableMarket, read
from service.learner.rules import MarketRules, Rules

CAP = 8_000_000
KEY = ("second", "north")


def outcomes(rng: np.random.Generator, count: int, sources: int) -> list[Lesson]:
    """Wins, losses and what teaches nothing, at few prices, so that most come again."""
    lessons = list[Lesson]()
    for _ in range(count):
        bid, rival = (int(one) for one in rng.integers(0, 9, 2) * 1_100_000)
        body = {
            "bid": bid,
            "price": min(rival, bid),
            "to_win": rival if rng.random() < 0.7 else None,
            "source": f"source-{rng.integers(sources)}",
            "auction": str(rng.choice(["first", "second", "fixed"])),
            "round": 1,
        }
        kind = "void" if rng.random() < 0.1 else "won" if rival <= bid else "lost"
        lessons.append(Lesson("reset" if rng.random() < 0.005 else kind, body))
    return lessons


@pytest.mark.parametrize("priced", [False, True])
@pytest.mark.parametrize("sources", [1, 3, 40])
def test_one_at_a_time_leaves_the_bytes_of_all_at_once(sources: int, *, priced: bool) -> None:
    """Also with more sources than have names, and where a reset begins afresh."""
    rules = Rules(CAP, market=MarketRules.of(CAP, priced=priced))
    lessons = outcomes(np.random.default_rng(sources), 400, sources)
    state = b""
    for lesson in lessons:
        state = market_part.learn(state, [lesson], rules)

    assert state == market_part.learn(b"", lessons, rules)
    assert read(state).to_bytes() == state


def test_only_what_was_counted_before_is_counted_in_place() -> None:
    """Another source, place or column needs the whole state."""
    market = MarketState(CAP)
    market.count(KEY, 7, SEEN)
    state = MarketBytes(market.to_bytes())

    assert not state.count(("first", "north"), 7, SEEN)
    assert not state.count(("second", "south"), 7, SEEN)
    assert not state.count(KEY, 8, SEEN)
    assert not state.count(KEY, 7, SEEN + 1)
    assert state.to_bytes() == market.to_bytes()

    market.count(KEY, 7, SEEN)

    assert state.count(KEY, 7, SEEN)
    assert state.to_bytes() == market.to_bytes()


@pytest.mark.parametrize("damage", [b"", b"mkt", b"x" * 60])
def test_a_damaged_state_is_left_to_who_refuses_it(damage: bytes) -> None:
    """It is never counted into."""
    rules = Rules(CAP, market=MarketRules.of(CAP, priced=False))
    lesson = outcomes(np.random.default_rng(1), 1, 1)

    assert not MarketBytes(damage).sound
    with pytest.raises(UnreadableMarket):
        market_part.learn(damage + b"damaged", lesson, rules)
