"""A run books in one sum what the rules of settle.py book one by one, and says the same of each."""

from __future__ import annotations

from typing import Any

from hypothesis import given
from hypothesis import strategies as some

from service.ledger.accounts import Account, Day, Slice
from service.ledger.runs import Run
from service.ledger.settle import Outcome, Place, settle

HOLD_MAX = 50
prices = some.none() | some.integers(0, 2 * HOLD_MAX)
outcomes = some.builds(
    Outcome,
    some.sampled_from(["won", "lost", "void"]),
    some.just(b"b"),
    some.integers(0, 9),
    some.integers(1, HOLD_MAX),
    some.sampled_from(["default", "north-exchange"]),
    prices,
    prices,
    some.none() | some.just("outbid"),
    some.none() | some.just("2026-12-01T10:00:00Z"),
    some.sampled_from(["first", "second", "fixed"]),
)


@given(
    some.lists(outcomes, max_size=8),
    some.sampled_from(["won", "billed"]),
    some.sampled_from(["open", "retired"]),
    some.integers(0, 9),
    some.integers(0, 9 * HOLD_MAX),
)
def test_a_run_is_its_outcomes_one_by_one(
    told: list[Outcome], spend_on: str, state: str, ticked: int, target: int
) -> None:
    """The same entries, costs and balances, under a budget that was lowered too."""
    held = sum(outcome.hold for outcome in told) + HOLD_MAX
    slice_ = Slice(b"s" * 16, "x", "w", "2026-12-01", held, held, 0, ticked, ticked, state)
    budget = max(target, held)
    account = Account("x", budget, target, 0, held, 0, 0, 0, 0)
    day = Day("x", "2026-12-01", budget, target, 0, held, 0)
    run, now = Run(slice_, spend_on), (account, day, slice_)
    for outcome in told:
        verdict = settle(outcome, Place(*now, {}, spend_on))
        entry = verdict.entry
        assert entry is not None
        said: dict[str, Any] = {**entry.body, "slice": slice_.id.hex(), "day": day.day}
        body, cost = run.take(outcome)
        assert (list(body.items()), cost) == (list(said.items()), entry.cost)
        assert verdict.status == "recorded"
        moved = verdict.movement
        now = (now[0].moved(moved), now[1].moved(moved), now[2].moved(moved, verdict.rounds))
    moved = run.movement
    assert now == (account.moved(moved), day.moved(moved), slice_.moved(moved, run.rounds))
