"""News of competing bids, folded: what each kind of auction tells, and that it stays small."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from service.learner import market_part
from service.learner.curve_counts import (
    ABOVE,
    BELOW,
    LOST,
    PARTS,
    SEEN,
    WON,
    Counts,
    Outcome,
    add,
)
from service.learner.fold import fold
from service.learner.lesson import Lesson
from service.learner.market_state import (
    BYTES_MAX,
    NAMED,
    POOLED,
    MarketState,
    UnreadableMarket,
    joined,
    read,
)
from service.learner.memory import Memory
from service.learner.partition import Ticks
from service.learner.rules import Drift, MarketRules, Rules

CAP = 8_000_000
TICK = 12_500  # Of 800 cells up to 10 CPM.
BARE = Rules(CAP, market=MarketRules.of(CAP, priced=False))
PRICED = Rules(CAP, market=MarketRules.of(CAP, priced=True))
KEPT = 0.8035209  # exp(-14 / 64).


def entry(kind: str, bid: int, at_ms: int = 0, **said: Any) -> Lesson:
    """An outcome in a first-price auction, unless said otherwise."""
    body = {"bid": bid, "price": None, "to_win": None, "source": "north", "round": 1}
    return Lesson(kind, {**body, "auction": "first", **said}, at_ms)


def told(rules: Rules, *lessons: Lesson) -> Counts:
    """The counts of the one source that these lessons leave."""
    market = read(market_part.learn(b"", lessons, rules))
    (key,) = market.sources
    return market.counts(key)


def column(counts: Counts) -> dict[int, int]:
    """The one column that is filled, and the place, of one auction."""
    ((place, row),) = counts.rows
    assert sum(row) == PARTS
    return {row.index(PARTS): place}


BID = 100 * TICK + 1  # A little above its tick.


@pytest.mark.parametrize(
    ("rules", "lesson", "expected"),
    [
        (BARE, entry("won", BID, auction="second", price=60 * TICK), {SEEN: 60}),
        (BARE, entry("lost", BID, auction="second"), {ABOVE: 100}),
        (BARE, entry("lost", BID, auction="second", to_win=150 * TICK), {ABOVE: 100}),
        (PRICED, entry("lost", BID, auction="second", to_win=150 * TICK), {SEEN: 150}),
        (BARE, entry("won", BID, price=BID), {WON: 101}),
        (BARE, entry("lost", BID), {LOST: 101}),
        (BARE, entry("won", BID, price=BID, to_win=60 * TICK), {SEEN: 60}),
        (PRICED, entry("won", BID, price=BID), {BELOW: 101}),
        (PRICED, entry("lost", BID, to_win=150 * TICK), {SEEN: 150}),
        (BARE, entry("lost", 900 * TICK), {ABOVE: 800}),
    ],
)
def test_each_kind_of_auction_tells_its_own(
    rules: Rules, lesson: Lesson, expected: dict[int, int]
) -> None:
    """A second price is the rival's; a first price says only won or lost, unless to_win came."""
    assert column(told(rules, lesson)) == expected


@pytest.mark.parametrize(
    "lesson",
    [
        entry("won", BID, auction="fixed", price=BID),
        entry("void", BID),
        entry("won", BID, auction="second", price=BID + 1),
        entry("lost", BID, to_win=BID),
        entry("won", BID, price=BID, only="value"),
        entry("won", 900 * TICK, price=900 * TICK),
    ],
)
def test_what_tells_nothing_of_rivals_is_not_counted(lesson: Lesson) -> None:
    """A price taken or left, a slip, a contradiction, a win retracted in its market part."""
    state = market_part.learn(b"", [lesson], BARE)
    assert not state or not read(state).sources


def test_a_reset_forgets_all_and_the_fold_carries_the_part() -> None:
    """What stands after a reset is what came after it, as for every other part."""
    before, after = entry("lost", BID, 1), entry("won", BID, 3, price=BID)
    memory = fold(Memory.fresh(), [before, Lesson("reset", {}, 2), after], BARE)
    assert read(memory.part("market")).counts(("first", "north")).auctions == 1.0
    assert fold(memory, [], Rules(CAP)).part("market") == b""


def test_piece_by_piece_gives_the_same_bytes_as_at_once() -> None:
    """Also while the old is forgotten, by time and by rounds, and while ticks are joined."""
    rng = np.random.default_rng(4)
    lessons = [
        entry(
            "lost",
            int(rng.integers(1, CAP)),
            at_ms,
            source=f"s{int(rng.integers(30))}",
            auction="second",
        )
        for at_ms in range(1, 6000, 2)
    ]
    for drift in (None, Drift("discount", "time", 2000), Drift("window", "rounds", 500)):
        rules = Rules(CAP, drift=drift, market=MarketRules.of(CAP, priced=False))
        state = b""
        for start in range(0, len(lessons), 700):
            state = market_part.learn(state, lessons[start : start + 700], rules)
        assert state == market_part.learn(b"", lessons, rules)
        assert read(state).to_bytes() == state


def test_the_old_is_forgotten_at_the_speed_of_the_values() -> None:
    """After one memory's time a count weighs e^-1, to the piece; within a moment nothing fades."""
    drift = Drift("discount", "time", 6400)
    rules = Rules(CAP, drift=drift, market=MarketRules.of(CAP, priced=False))
    late = entry("lost", CAP // 2, 6400)
    market = read(market_part.learn(b"", [entry("lost", BID), late], rules))
    old, new = (row[LOST] / PARTS for _, row in market.counts(("first", "north")).rows)
    assert [old, new] == pytest.approx([KEPT**4, 1.0], abs=1e-4)


def test_a_state_stays_within_its_bytes_whatever_comes() -> None:
    """Forty sources, every column, prices everywhere: the first have names, the rest one pool."""
    rng = np.random.default_rng(5)
    lessons = [
        entry(
            str(rng.choice(["won", "lost"])), bid, price=bid, source=f"{rng.integers(40):064d}",
            auction=str(rng.choice(["first", "second"])),
        )
        for bid in (int(rng.integers(1, 10_000_000)) for _ in range(20_000))
    ]  # fmt: skip
    state = market_part.learn(b"", lessons, PRICED)
    market = read(state)
    assert len(state) <= BYTES_MAX
    assert sum(source != POOLED for _, source in market.sources) == NAMED
    assert sum(market.counts(key).auctions for key in market.sources) == len(lessons)
    assert market.level > 0


def test_joined_ticks_count_as_coarse_ones_would_have() -> None:
    """Nothing is lost at the top, beyond it, or below a bid."""
    fine, coarse = Ticks(1003, 2), Ticks(1003, 4)
    rng = np.random.default_rng(6)
    outcomes = []
    for _ in range(3000):
        bid, least = int(rng.integers(1004)), int(rng.integers(1, 1100))
        won = least <= bid
        outcomes += [
            Outcome(bid, won, least, "always"),
            Outcome(bid, won, None, ("on_win", "on_loss", "never")[bid % 3]),
        ]
    assert joined(add(Counts(fine), outcomes), 250) == add(Counts(coarse), outcomes)


def test_damage_and_other_ticks_are_seen() -> None:
    """A flipped byte, a cut, or a state of another cap is no state."""
    state = market_part.learn(b"", [entry("lost", BID)], BARE)
    for wrong in (state[:-1], state[:3] + b"\x09" + state[4:], b"", state[:20]):
        with pytest.raises(UnreadableMarket):
            read(wrong)
    other = Rules(CAP, market=MarketRules.of(10 * CAP, priced=False))
    with pytest.raises(UnreadableMarket):
        market_part.learn(state, [entry("lost", BID)], other)


def test_most_changes_of_a_cap_recount_nothing() -> None:
    """Tops go in steps, and the smallest still has ticks."""
    assert MarketRules.of(5_000_001, priced=True) == MarketRules.of(CAP, priced=True)
    assert MarketState(MarketRules.of(1, priced=True).top).ticks.cells == 500


def test_first_price_sources_are_read_alone() -> None:
    """Without the others the counts are those of a whole reading, whatever came in between."""
    auctions, rng = ("first", "second"), np.random.default_rng(7)
    lessons = [
        entry("lost", int(bid), auction=auctions[at % 2], source=f"s{at % 5}")
        for at, bid in enumerate(rng.integers(TICK, CAP, 200))
    ]
    state = market_part.learn(b"", lessons, BARE)
    whole, alone = read(state), read(state, first_only=True)

    assert {key for key in whole.sources if key[0] == "first"} == set(alone.sources) != set()
    assert all(alone.counts(key) == whole.counts(key) for key in alone.sources)
