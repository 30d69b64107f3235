"""Pacing as it is folded from the stream: what moves it, what it keeps, and that bytes agree."""

from __future__ import annotations

from typing import Any

import pytest

from service.learner import pacing
from service.learner.lesson import SPENT, Lesson
from service.learner.pace_part import Pacing, UnreadablePart, learn, weights_of
from service.learner.pacing import UNITS

HOUR_MS = 3_600_000
MONEY = 24 * 10**9
GUESS = 2 * 10**8
PRICE = 10**8
ENTRY: dict[str, Any] = {
    **{"budget": 100 * MONEY, "daily_budget": MONEY, "ends_ms": None, "zone": "UTC"},
    **{"pacing": {"method": "dual", "profile": None}, "guess": GUESS, "grace_ms": 900_000},
}


def create(**changes: Any) -> Lesson:
    """The first entry of a stream, at midnight."""
    return Lesson("create", {**ENTRY, **changes})


def edit(at_ms: int, **changes: Any) -> Lesson:
    """An entry that changes how money may be spent."""
    return Lesson("edit", {**ENTRY, **changes}, 0, at_ms)


def won(at_ms: int, cost: int, late: bool = False) -> Lesson:
    """A win, booked at a moment of the wall clock."""
    body = {"price": cost, "round": int(not late), "late": late}
    return Lesson("won", body, 0, at_ms, cost)


def tick(at_ms: int, under_floor: int = 0) -> Lesson:
    """What a worker priced meanwhile."""
    return Lesson("tick", {"rounds": 1, "under_floor": under_floor}, 0, at_ms)


def folded(*lessons: Lesson) -> Pacing:
    """The state after these lessons."""
    return Pacing.from_bytes(learn(b"", lessons))


BUSY = [create(), *(won(minute * 60_000, PRICE) for minute in range(1, 60))]


def test_spending_too_fast_raises_the_multiplier_and_late_wins_do_too() -> None:
    """An hour at six times the rate bids less; the money of a late win is money like any other."""
    busy = folded(*BUSY)
    assert busy.progress.today == busy.progress.total == 59 * PRICE
    assert busy.multiplier > UNITS
    late = folded(*BUSY, won(HOUR_MS, 10**9, late=True))
    assert late.multiplier > folded(*BUSY, tick(HOUR_MS)).multiplier
    assert (late.progress.total, late.pace.rounds) == (busy.progress.total + 10**9, 59)


def test_only_what_a_bid_may_cost_is_spent_and_only_wins_move_the_multiplier() -> None:
    """A price above the bid is disputed; what people reverse in one sum is money alone."""
    above = Lesson("won", {"price": 9, "bid": 5, "round": 1}, 0, HOUR_MS, 9)
    assert folded(create(), above).progress.total == 5
    reversal = Lesson("reversal", {"amount": PRICE}, 0, 59 * 60_000, PRICE)
    assert folded(*BUSY, reversal).progress.total == 58 * PRICE
    assert folded(*BUSY, reversal).pace == folded(*BUSY).pace


def test_passes_under_the_floor_are_rounds_that_bring_bids_up_again() -> None:
    """A floor above every bid ends no pacing: what falls due lowers the multiplier to nothing."""
    ticks = [tick(HOUR_MS + 10_000 * n, under_floor=20) for n in range(1, 6 * 360)]
    paced = folded(*BUSY, *ticks)
    assert (paced.multiplier, paced.pace.rounds) == (0, 59 + 21 * len(ticks))


def test_a_fold_by_pieces_gives_the_bytes_of_one_from_zero() -> None:
    """Edits among them: the stream says what might be spent at each moment."""
    other = {"method": "adaptive", "profile": [0.5, *[1] * 23]}
    lessons = [*BUSY, edit(HOUR_MS, pacing=other), *(won(HOUR_MS + n, 10**8) for n in range(9))]
    state = b""
    for lesson in lessons:
        state = learn(state, [lesson])
    assert state == learn(b"", lessons)
    assert Pacing.from_bytes(state).to_bytes() == state


def test_an_edit_changes_what_is_due_and_keeps_the_multiplier() -> None:
    """Also into another form; and without a rate nothing is paced until there is one again."""
    before = folded(*BUSY)
    for method in ("dual", "adaptive", "entropy"):
        after = folded(*BUSY, edit(59 * 60_000, pacing={"method": method}, daily_budget=2 * MONEY))
        assert after.spending.plan.daily == 2 * MONEY
        assert after.multiplier == pytest.approx(before.multiplier, rel=1e-9)
    bare = folded(*BUSY, edit(59 * 60_000, daily_budget=None))
    assert (bare.multiplier, bare.pace.level) == (0, before.pace.level)
    again = folded(*BUSY, edit(59 * 60_000, daily_budget=None), edit(59 * 60_000))
    assert again.multiplier == before.multiplier


def test_without_a_method_money_is_counted_and_nothing_is_paced() -> None:
    """So that pacing that is switched on later knows what was spent today."""
    none = folded(create(pacing={"method": "none"}), *BUSY[1:])
    assert (none.multiplier, none.progress) == (0, folded(*BUSY).progress)
    on = folded(create(pacing=None), *BUSY[1:], edit(59 * 60_000))
    assert (on.multiplier, on.progress) == (0, none.progress)


def test_a_reset_forgets_the_multiplier_and_no_money() -> None:
    """What a retracted win has cost is money too."""
    reset = folded(*BUSY, Lesson("reset", {}, 0, HOUR_MS))
    assert (reset.multiplier, reset.progress.today) == (0, 59 * PRICE)
    assert reset.pace.price == pacing.usual_price(GUESS, 0)
    spent = folded(*BUSY, Lesson(SPENT, {}, 0, HOUR_MS, 5))
    assert spent.progress.today == 59 * PRICE + 5


def test_the_day_is_the_local_one() -> None:
    """What was spent before midnight of the zone is not of the new day."""
    tokyo = [create(zone="Asia/Tokyo"), won(14 * HOUR_MS, 7), won(15 * HOUR_MS, 5)]
    assert (folded(*tokyo).progress.today, folded(*tokyo).progress.total) == (5, 12)


def test_fractions_of_a_profile_become_whole_weights() -> None:
    """The largest is a million; whole numbers stay, and none given is an even day."""
    assert weights_of([0.5, *[0.25] * 23]) == (10**6, *[5 * 10**5] * 23)
    assert weights_of([3, *[1] * 23]) == (3, *[1] * 23)
    assert weights_of(None) == (1,) * 24


def test_before_the_first_entry_there_is_no_state() -> None:
    """And bytes that are none are refused by name."""
    assert learn(b"", [tick(5)]) == b""
    whole = folded(create()).to_bytes()
    for bad in (b"{}", b"5", whole[:-1], whole.replace(b'"form":1', b'"form":2')):
        with pytest.raises(UnreadablePart):
            learn(bad, [])
