"""Age becomes weight: open wins by their age, forgetting, and what is never forgotten."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from service.decision.counts import (
    DELAY_HALVINGS,
    Counts,
    delay_mean_ms,
    exposure,
    nothing,
    waiting,
)
from service.decision.price import Proposal, ready
from service.decision.terms import Terms
from service.learner import delay
from service.learner.fold import Lesson, fold
from service.learner.memory import Cell, Memory
from service.learner.rules import KEPT, Rules
from service.learner.tally import Tally
from tests.decision.invented import CAP, CEILING, config, with_value

DAY_MS = 86_400_000
WINDOW_MS = 7 * DAY_MS


def terms(method: str = "ucbid", **value: object) -> Terms:
    """Terms of the invented line item whose values accrue within a week."""
    return Terms.from_config(with_value(config(method), arrival="accrues", **value))


def cells(*rows: Cell, clock_ms: int, closed: int = 0, base: Tally | None = None) -> Memory:
    """A memory of these cells alone."""
    return Memory(base=base or Tally(), cells=rows, closed=closed, clock_ms=clock_ms)


def test_an_open_win_counts_by_its_age_under_a_known_law() -> None:
    """(1 - e^(-a/m)) / (1 - e^(-w/m)) of ten wins at a = 1.5 days, m = 1.5, w = 7 days."""
    memory = cells(Cell(0, bought=10), clock_ms=3 * DAY_MS)
    known = exposure(memory, terms(delay_mean_ms=3 * DAY_MS // 2)).sum()
    by_hand = 10 * (1 - np.exp(-1.0)) / (1 - np.exp(-7 / 1.5))

    assert known == pytest.approx(by_hand, rel=1e-12)


def test_a_closed_window_counts_in_full_whatever_the_law() -> None:
    """Kept apart for forgetting or long ago, what is known is known."""
    memory = cells(
        Cell(0, bought=10, known=10), clock_ms=30 * DAY_MS, closed=1, base=Tally(known=7)
    )

    assert exposure(memory, terms(delay_mean_ms=10**12)).tolist() == [7.0, 10.0]


def test_without_a_configured_delay_it_is_fitted() -> None:
    """A hundred conversions after half a day each, beside closed windows, tell half a day."""
    memory = replace(
        cells(Cell(30 * DAY_MS, bought=100), clock_ms=31 * DAY_MS),
        base=Tally(known=10_000, converted=100),
        delays=100,
        delay_sum_ms=50 * DAY_MS,
    )

    assert delay_mean_ms(memory, terms()) == pytest.approx(DAY_MS / 2, rel=0.05)
    assert delay_mean_ms(memory, terms(delay_mean_ms=5)) == 5.0


def test_before_any_value_the_delay_is_a_quarter_of_the_window() -> None:
    """Nobody can know it then, so a win a week old counts in full and a young one in part."""
    memory = cells(Cell(0, bought=10), clock_ms=DAY_MS)

    assert delay_mean_ms(memory, terms()) == pytest.approx(WINDOW_MS / 4, rel=1e-9)


def test_values_told_once_need_no_law() -> None:
    """There a win is known when its value came, whatever its age."""
    once = Terms.from_config(config("ucbid"))
    memory = cells(Cell(0, bought=10, known=4), clock_ms=DAY_MS)

    assert float(Counts.of(memory, once).known) == 4.0


def test_discounting_by_rounds_halves_by_age() -> None:
    """A memory of 1,000 rounds weighs what is n rounds old by (1 - 1/1000)^n, as published."""
    once = Terms.from_config(with_value(config(), drift={"how": "discount", "rounds": 1000}))
    old, new = Cell(0, rounds=2000, known=1000), Cell(9, rounds=2000, known=1000)
    counts = Counts.of(replace(cells(old, new, clock_ms=9), base=Tally(rounds=4000)), once)
    weights = (np.exp(-1.0), np.exp(-3.0))

    assert float(counts.known) == pytest.approx(1000 * sum(weights), rel=2e-3)
    assert float(counts.rounds) == pytest.approx(2000 * sum(weights), rel=2e-3)


def test_a_window_counts_all_inside_and_nothing_outside() -> None:
    """By time: two of three cells lie within the last two days."""
    drift = {"how": "window", "rounds": None, "memory_ms": 2 * DAY_MS}
    once = Terms.from_config(with_value(config(), drift=drift))
    rows = [Cell(day * DAY_MS, known=100, converted=day) for day in range(3)]
    counts = Counts.of(cells(*rows, clock_ms=3 * DAY_MS, base=Tally(known=1000)), once)

    assert (float(counts.known), float(counts.converted)) == (200.0, 3.0)


def test_the_newest_fifty_count_however_old() -> None:
    """Of two old cells of forty, the newer counts in full and a quarter of the older."""
    drift = {"how": "window", "rounds": None, "memory_ms": 1000}
    once = Terms.from_config(with_value(config(), drift=drift))
    older, newer = Cell(0, known=40, amount=4000), Cell(DAY_MS, known=40, amount=80)
    counts = Counts.of(cells(older, newer, Cell(2 * DAY_MS), clock_ms=9 * DAY_MS), once)

    assert float(counts.known) == KEPT
    assert float(counts.amount) == 80 + 1000


@pytest.mark.parametrize("how", ["window", "discount"])
@pytest.mark.parametrize("method", ["ucbid", "kl-ucbid", "bernstein-ucbid", "bayes-ucb"])
def test_winning_rarely_is_no_reason_to_bid_the_cap_for_ever(how: str, method: str) -> None:
    """One worthless win in two days, a memory of one hour: the bid is not that of no lesson."""
    drift = {"how": how, "rounds": None, "memory_ms": 3_600_000}
    base = with_value(config(method), arrival="accrues", drift=drift, ceiling=CAP)
    rules, of = Rules.from_config(base), Terms.from_config(base)
    rows = [Lesson("won", {"price": 1, "round": 1}, day * 2 * DAY_MS) for day in range(120)]
    memory = fold(Memory.fresh(), [*rows, Lesson("lease", {}, 600 * DAY_MS)], rules)
    first, last = ready(Memory.fresh(), of).at(0.5), ready(memory, of).at(0.5)

    assert float(Counts.of(memory, of).known) >= KEPT
    assert isinstance(first, Proposal)
    assert isinstance(last, Proposal)
    assert first.price > 1.5 * last.price > 0


def test_a_sum_below_zero_counts_as_zero() -> None:
    """A correction after a reset can leave one, and no index is defined there."""
    counts = Counts.of(Memory(base=Tally(known=-1, amount=-5)), Terms.from_config(config()))

    assert [float(one) for one in counts.all] == [0.0] * 5


def test_the_round_to_be_bid_in_explains_all_that_is_known() -> None:
    """From one, and never below the wins that are known."""
    five = np.asarray(5.0)

    assert float(nothing().round_next) == 1.0
    assert float(replace(nothing(), known=five).round_next) == 6.0
    assert nothing(3).round_next.shape == (3,)


def test_mean_and_variance_are_shares_of_the_scale() -> None:
    """Ten known, two at half the ceiling: mean a tenth, variance 0.05 - 0.01."""
    half = CEILING // 2
    tally = Tally(
        rounds=10, wins=10, known=10, converted=2, amount=2 * half, amount_square=2 * half**2
    )
    of = Terms.from_config(config())
    counts = Counts.of(Memory(base=tally), of)

    assert float(counts.mean_share(of)) == pytest.approx(0.1, rel=1e-12)
    assert float(counts.variance_share(of)) == pytest.approx(0.04, rel=1e-12)


def columns(memory: Memory, of: Terms) -> np.ndarray[tuple[int, int], np.dtype[np.float64]]:
    """Rounds, known, converted, amount and its square of each cell, by arrays throughout."""
    base, ages = memory.base, waiting(memory, of).ages
    bought = np.asarray([cell.bought for cell in memory.cells], dtype=np.float64)
    mean_ms = 1.0 / delay.fit(waiting(memory, of), 1.0, of.window_ms / 4, DELAY_HALVINGS).rate
    share = delay.arrived_share(ages[:-1], np.full(len(bought), mean_ms), of.window_ms)
    closed = np.arange(len(bought)) < memory.closed
    known = np.where(closed, [cell.known for cell in memory.cells], bought * share)
    sums = [[c.rounds, c.converted, c.amount, c.amount_square] for c in memory.cells]
    long_ago = base.rounds - sum(cell.rounds for cell in memory.cells)
    first = [long_ago, base.converted, base.amount, base.amount_square]
    return np.insert(np.asarray([first, *sums], dtype=np.float64), 1, [base.known, *known], axis=1)


@pytest.mark.parametrize("span", [1, 5, 64])
@pytest.mark.parametrize("values", [0.0, 0.02, 0.5])
def test_a_snapshot_has_the_counts_that_arrays_give(span: int, values: float) -> None:
    """To the last bit, however many cells are open and values have come."""
    of, rng = terms(), np.random.default_rng(span)
    rules = Rules.from_config(with_value(config("ucbid"), arrival="accrues"))
    memory, at_ms = Memory.fresh(), 0
    for _ in range(span):
        at_ms += WINDOW_MS // 64
        wins = [Lesson("won", {"price": 1, "round": 1}, at_ms)] * int(rng.integers(1, 40))
        brought = [
            Lesson("value", {"amount": 777, "was": None, "won_ms": at_ms}, at_ms + ms)
            for ms in sorted(rng.integers(1, 9_000_000, rng.binomial(len(wins), values)).tolist())
        ]
        memory = fold(memory, [*wins, *brought], rules)
    many = np.maximum(columns(memory, of).sum(axis=0), 0.0)

    assert [float(one) for one in Counts.of(memory, of).all] == many.tolist()
