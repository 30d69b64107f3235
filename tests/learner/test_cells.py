"""Impressions kept by age: how windows close, what is forgotten, and how much room that takes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from service.learner.cells import KEPT_PIECE
from service.learner.fold import Lesson, fold
from service.learner.growing import law_of
from service.learner.memory import Memory
from service.learner.rules import ACCRUES, CELLS, KEPT, ONCE, Drift, Rules
from service.learner.rules import tree_rules as tree_rules_of
from tests.decision.invented import config

CEILING = 1000
WINDOW_MS = 6400
DAY_MS = 86_400_000
PLAIN = Rules(CEILING, ACCRUES, WINDOW_MS)
BY_TIME = replace(PLAIN, drift=Drift("window", "time", DAY_MS))
STATE_BYTES_MAX = 64 * 1024


def win(at_ms: int) -> Lesson:
    """One impression bought."""
    return Lesson("won", {"price": 1, "round": 1, "late": False}, at_ms)


def worth(at_ms: int, amount: int, won_ms: int, was: int | None = None) -> Lesson:
    """Its one value, or a correction."""
    body = {"amount": amount, "was": was, "won_ms": won_ms, "total_was": was or 0}
    return Lesson("value", body, at_ms)


def passed(at_ms: int) -> Lesson:
    """A moment at which nothing is learnt."""
    return Lesson("lease", {}, at_ms)


def folded(lessons: list[Lesson], rules: Rules) -> Memory:
    """A memory of these lessons."""
    return fold(Memory.fresh(), lessons, rules)


def test_an_open_window_lies_in_at_most_so_many_cells() -> None:
    """However many wins there are, the oldest open cell is younger than window and one cell."""
    memory = folded([win(at) for at in range(0, 50 * WINDOW_MS, 7)], PLAIN)
    open_ms = memory.clock_ms - memory.cells[0].start_ms

    assert memory.closed == 0
    assert len(memory.cells) <= CELLS + 2
    assert open_ms <= WINDOW_MS + 2 * PLAIN.cell_ms
    assert memory.total.wins == memory.base.known + sum(cell.bought for cell in memory.cells)


def test_without_forgetting_closed_cells_join_the_long_ago() -> None:
    """Nothing older than a window is kept apart, so idle line items are small."""
    memory = folded([win(0), worth(5, 9, 0), passed(10 * WINDOW_MS)], PLAIN)

    assert (memory.base.known, memory.base.converted, memory.base.amount) == (1, 1, 9)
    assert sum(cell.bought for cell in memory.cells) == 0


@pytest.mark.parametrize("rules", [BY_TIME, replace(BY_TIME, drift=Drift("discount", "time", 9))])
@pytest.mark.parametrize("gap_ms", [1000, DAY_MS // 3, 5 * DAY_MS])
def test_the_newest_known_stay_apart_however_old(rules: Rules, gap_ms: int) -> None:
    """Fifty of them at least, and not many more than the horizon asks for."""
    memory = folded([win(at * gap_ms) for at in range(400)], rules)
    later = fold(memory, [passed(memory.clock_ms + 90 * DAY_MS)], rules)
    kept = sum(cell.known for cell in later.cells)

    assert KEPT <= kept
    if gap_ms == 5 * DAY_MS:
        assert kept <= KEPT + KEPT_PIECE
        assert len(later.cells) <= 2 * KEPT // KEPT_PIECE + 2
    assert later.total.known == 400


def test_what_is_beyond_the_horizon_makes_room_when_newer_is_known() -> None:
    """Old market, silence, then fifty new wins: nothing of the old market is kept apart."""
    old = [lesson for at in range(300) for lesson in (win(at), worth(at, CEILING, at))]
    new = [win(30 * DAY_MS + at) for at in range(KEPT)]
    memory = folded([*old, passed(9 * DAY_MS), *new, passed(33 * DAY_MS)], BY_TIME)

    assert sum(cell.known for cell in memory.cells) == KEPT
    assert sum(cell.converted for cell in memory.cells) == 0
    assert memory.base.converted == 300


def test_a_correction_finds_the_cell_of_its_win() -> None:
    """Taken back to nothing before its window closes, a win has brought nothing anywhere."""
    rows = [win(0), worth(10, 9, 0), win(3000), worth(3100, 5, 3000), worth(6000, 0, 0, was=9)]
    memory = folded(rows, PLAIN)

    assert (memory.total.converted, memory.total.amount) == (1, 5)
    assert all(cell.amount >= 0 for cell in memory.cells)


def drawn(rates: list[tuple[int, float]], seed: int) -> list[Lesson]:
    """Wins one a second at these rates in turn, each with its value at once."""
    chance, rows, at_ms = np.random.default_rng(seed), list[Lesson](), 0
    for count, rate in rates:
        for hit in chance.random(count) < rate:
            at_ms += 1000
            rows += [win(at_ms), *([worth(at_ms, CEILING, at_ms)] if hit else [])]
    return rows


def test_a_detector_that_restarts_forgets_what_came_before() -> None:
    """After the rate fell to a tenth, what is left is of the new rate; the sums of money stay."""
    rows = drawn([(3000, 0.2), (1500, 0.02)], 3)
    looking = replace(PLAIN, ratio=3.0, restarts=True)
    plain, restarted = folded(rows, PLAIN).total, folded(rows, looking)

    assert restarted.watch.alarms == 1
    assert abs(restarted.watch.changed_ms - 3_000_000) < 60_000
    assert restarted.total.converted / restarted.total.known < 0.04
    assert plain.converted / plain.known > 0.1
    assert (restarted.total.wins, restarted.total.paid) == (plain.wins, plain.paid)


def test_a_detector_that_only_flags_changes_nothing_else() -> None:
    """The alarm is counted; the sums are those of no detector at all."""
    rows = drawn([(3000, 0.2), (1500, 0.02)], 3)
    flagged = folded(rows, replace(PLAIN, ratio=3.0))

    assert flagged.watch.alarms == 1
    assert flagged.total == folded(rows, PLAIN).total


def test_values_from_before_a_restart_teach_nothing() -> None:
    """Neither a late first value nor a correction, so no sum can fall below zero."""
    looking = replace(PLAIN, arrival=ONCE, ratio=3.0, restarts=True)
    rows: list[Lesson] = []
    for lesson in drawn([(3000, 0.2), (1500, 0.02)], 2):
        rows.append(lesson)
        if lesson.kind == "won" and (not rows[-2:-1] or rows[-2].kind != "value"):
            rows.append(worth(lesson.at_ms, 0, lesson.at_ms))
    memory = folded(rows, looking)
    assert memory.began_ms > 0
    moment = memory.clock_ms + 1
    took_back = [worth(moment, 0, at, was=CEILING) for at in range(1000, memory.began_ms, 1000)]

    assert fold(memory, took_back, looking).total.amount == memory.total.amount > 0


def test_the_largest_state_stays_under_64_kib() -> None:
    """Every cell in use, sums as long as they get, and a tree cut at every tick."""
    rules = Rules.from_config({**config("exptree"), "losses": "priced"})
    tree = tree_rules_of(config("exptree"))
    assert tree is not None
    stage = list(law_of(b"", tree).stage)
    drift = replace(rules, drift=Drift("window", "time", 90 * DAY_MS), window_ms=DAY_MS)
    big, rows = 10**6, list[Lesson]()
    for at in range(6000):
        body = {"price": at * 3989 % 8_000_000, "round": 1, "late": False}
        said = {"chance": 1e-6, "stage": stage}
        rows.append(Lesson("won", {**body, **said}, at * DAY_MS // 64))
        rows.append(worth(at * DAY_MS // 64, 10**8, at * DAY_MS // 64))
        rows.append(Lesson("tick", {"rounds": big, "under_floor": big}, at * DAY_MS // 64))
    memory = folded(rows, drift)

    assert len(memory.cells) > 1.9 * CELLS
    assert len(memory.to_bytes()) < STATE_BYTES_MAX
