"""The tree against worked examples, exact expectations, and any order of its lessons.

Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016, Algorithm 2 and
Theorem 9. The win-only variant is our own derivation, not published. The figures of the
worked examples were computed apart from this code, by the formulas.
"""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import accumulate

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.exptree import law, learn
from service.learner.exptree_bounds import UNITS
from service.learner.exptree_law import Law
from service.learner.exptree_lessons import Lesson, Lost, Passed, Won, Worth
from service.learner.exptree_rules import FIRST, Rules
from service.learner.exptree_state import Tree
from service.learner.partition import Ticks
from tests.learner.exptree_games import SCALE, epoch_of, nanos, outcome, rules, shuffled

CLOSE = 1e-9


def weights(tree: Tree) -> list[float]:
    """The weight of each interval from below; the lowest has one."""
    logs = accumulate((step for _, step in tree.steps), initial=0)
    return [math.exp(log / UNITS) for log in logs]


def shares(now: Law) -> list[float]:
    """The share of each interval in the mass that is not forced."""
    widths = np.diff(now.ends, prepend=0)
    masses = (widths * now.masses).tolist()
    return [mass / sum(masses) for mass in masses]


def taught(tree: Tree, of: Rules, bid: float, price: float, value: float = 0.0) -> Tree:
    """The tree after one bid and what came of it, in shares of the scale."""
    return learn(tree, outcome(law(tree, of), nanos(bid), nanos(price), nanos(value)), of)


def test_the_published_tree_in_two_rounds() -> None:
    """Algorithm 2 at rate 0.5: a win at 0.4 worth 0.9, then a loss at 0.55."""
    of = rules(20, win_only=False, rate=0.5)
    assert law(Tree.fresh(), of).chance_above(nanos(0.4)) == pytest.approx(0.6, abs=CLOSE)

    one = taught(Tree.fresh(), of, bid=0.71, price=0.4, value=0.9)
    assert one.steps[0][1] / UNITS == pytest.approx(0.5 * 0.1666666667, abs=CLOSE)
    assert weights(one) == pytest.approx([1.0, 1.08690405], rel=CLOSE)
    assert shares(law(one, of)) == pytest.approx([0.380176665, 0.619823335], abs=CLOSE)

    two = taught(one, of, bid=0.21, price=0.55)
    assert [tick for tick, _ in two.steps] == [8, 11]
    assert weights(two) == pytest.approx([1.0, 1.08690405, 1.792001826], rel=CLOSE)
    assert shares(law(two, of)) == pytest.approx(
        [0.2920909591, 0.1190530674, 0.5888559735], abs=CLOSE
    )
    assert law(two, of).chance_above(nanos(0.5)) == pytest.approx(0.6285403293, abs=CLOSE)


def test_win_only_in_three_rounds() -> None:
    """Our own, at rate 0.2: a win at 0.4 worth 0.9, a loss, a win at 0.55 worth 0.1."""
    of = rules(20, win_only=True, rate=0.2)
    assert law(Tree.fresh(), of).chance_above(nanos(0.4)) == pytest.approx(0.68, abs=CLOSE)

    one = taught(Tree.fresh(), of, bid=0.71, price=0.4, value=0.9)
    assert one.steps[0][1] / UNITS == pytest.approx(0.2 * 0.7352941176, abs=CLOSE)
    assert shares(law(one, of)) == pytest.approx([0.365279036, 0.634720964], abs=CLOSE)

    two = taught(one, of, bid=0.21, price=0.55)
    assert two == replace(one, rounds=2)

    now = law(two, of)
    assert now.chance_above(nanos(0.55)) == pytest.approx(0.5808325784, abs=CLOSE)
    drawn = (now.chance_above(nanos(0.55)) - 0.2) / 0.8
    assert drawn == pytest.approx(0.476040723, abs=CLOSE)
    three = taught(two, of, bid=0.91, price=0.55, value=0.1)
    assert three.steps[1][1] / UNITS == pytest.approx(0.2 * -0.774749931, abs=CLOSE)
    assert shares(law(three, of)) == pytest.approx([0.39206989, 0.17031841, 0.4376117], abs=CLOSE)


@pytest.mark.parametrize("win_only", [False, True])
@pytest.mark.parametrize("price", [0, 35, 40, 73, 95, 98])
def test_the_expected_credit_of_every_cell_is_what_its_bids_earn(
    win_only: bool, price: int
) -> None:
    """
    Summed over all bids of the law, exactly: the log-weight of a cell moves by the rate times
    v - m times the share of its bids above m, whether the price is a tick or between two.
    """
    of = Rules(Ticks(99, 10), 99, win_only, rate=0.25)
    tree = learn(Tree.fresh(), [Won(30, 0.7, FIRST), Worth(60, 0.4, FIRST, amount=90)], of)
    now, value = law(tree, of), 80
    moved = np.zeros(of.ticks.cells)
    for bid, chance in chances(now).items():
        after = learn(tree, outcome(now, bid, price, value), of)
        moved += chance * (cell_logs(after, of) - cell_logs(tree, of))

    bids = [range(start + 1, end) for start, end in map(of.ticks.edges, range(of.ticks.cells))]
    above = np.array([sum(bid > price for bid in cell) / len(cell) for cell in bids])
    gains = 0.25 * above * (value - price) / of.scale
    # Weights are only known up to a factor: the lowest cell is the one to compare with.
    assert moved == pytest.approx(gains - gains[0], abs=1e-9)


def chances(now: Law) -> dict[int, float]:
    """The chance of each single bid, from the law's masses."""
    each = {now.ticks.top: now.forced / now.total}
    masses = np.repeat(now.masses, np.diff(now.ends, prepend=0)).tolist()
    for cell, mass in enumerate(masses):
        start, end = now.ticks.edges(cell)
        each |= {bid: mass / now.total / (end - start - 1) for bid in range(start + 1, end)}
    return each


def cell_logs(tree: Tree, of: Rules) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """The log-weight of each cell."""
    logs = np.zeros(of.ticks.cells)
    for tick, step in tree.steps:
        logs[tick:] += step / UNITS
    return logs


@pytest.mark.parametrize("win_only", [False, True])
@pytest.mark.parametrize("rate", [None, 0.1])
@given(seed=some.integers(0, 2**32))
def test_order_does_not_matter(win_only: bool, rate: float | None, seed: int) -> None:
    """Outcomes, values and corrections of three epochs in any order give the same bytes."""
    of, rng = rules(100, win_only, rate), np.random.default_rng(seed)
    tree, lessons = Tree.fresh(), list[Lesson]()
    for _ in range(3):
        epoch = epoch_of(of, tree, rng, rounds=6)
        within = learn(tree, shuffled(epoch, rng), of)
        tree = learn(tree, epoch, of)
        assert within.to_bytes(of) == tree.to_bytes(of)
        lessons += epoch

    assert learn(Tree.fresh(), shuffled(lessons, rng), of).to_bytes(of) == tree.to_bytes(of)


def test_each_guess_goes_as_far_as_the_furthest_seen_of_it() -> None:
    """A late law may have had one guess further and the other less; both orders agree."""
    of = rules(20, win_only=False)
    lessons: list[Lesson] = [Lost(nanos(0.5), (9, 0)), Lost(nanos(0.5), (2, 3))]

    trees = [learn(Tree.fresh(), order, of) for order in (lessons, lessons[::-1])]
    assert trees == [Tree(rounds=2, stage=(9, 3), steps=((10, 0),), lessons=2)] * 2


@pytest.mark.parametrize("win_only", [False, True])
def test_a_checkpoint_and_its_tail_equal_the_fold_from_zero(win_only: bool) -> None:
    """Wherever the stream is cut, and its first part read back from bytes."""
    of, rng = rules(100, win_only), np.random.default_rng(3)
    lessons = [*epoch_of(of, Tree.fresh(), rng, 40), *epoch_of(of, Tree(rounds=50), rng, 40)]
    whole = learn(Tree.fresh(), lessons, of).to_bytes(of)
    for cut in range(0, len(lessons), 7):
        checkpoint = learn(Tree.fresh(), lessons[:cut], of).to_bytes(of)
        rest = learn(Tree.from_bytes(checkpoint, of), lessons[cut:], of)
        assert rest.to_bytes(of) == whole


@pytest.mark.parametrize("win_only", [False, True])
def test_a_corrected_value_is_as_if_it_had_come_right(win_only: bool) -> None:
    """Up, down, to nothing, and above the ceiling, where both are cut."""
    of, chance = rules(20, win_only, rate=0.3), 0.37
    for amount in (0, nanos(0.123456789), nanos(1.0), nanos(7.0)):
        wrong = [Worth(nanos(0.4), chance, FIRST, nanos(0.777))]
        mended = [*wrong, Worth(nanos(0.4), chance, FIRST, amount, was=nanos(0.777))]
        right = [Worth(nanos(0.4), chance, FIRST, amount)]
        assert learn(Tree.fresh(), mended, of) == learn(Tree.fresh(), right, of)


def test_a_stage_that_is_over_begins_afresh_and_keeps_its_cuts() -> None:
    """Theorem 9: when the guess of rounds doubles all weights are one on the old partition."""
    of = rules(20, win_only=False)
    one = learn(Tree.fresh(), [Lost(nanos(0.9), (2, 1)), Passed(2)], of)
    assert (one.stage, one.rounds, one.counted) == ((2, 2), 3, 0)

    held = learn(one, [Lost(nanos(0.4), (2, 2), rounds=0)], of)
    assert (held.stage, held.counted, held.lessons) == ((2, 2), 1, 2)
    assert held.steps == ((8, UNITS // 2), (18, 0))

    over = learn(held, [Passed(1)], of)
    assert (over.stage, over.counted, over.lessons) == ((3, 2), 0, 2)
    assert over.steps == ((8, 0), (18, 0))
    assert shares(law(over, of)) == pytest.approx([1.0])


def test_a_narrower_interval_begins_a_stage_too() -> None:
    """Theorem 9: ln(1/width) of 0.05 is above 1 and 2, so its guess becomes 4."""
    of = rules(20, win_only=True)
    tree = learn(Tree.fresh(), [Won(nanos(0.5), 0.8, FIRST, rounds=0)], of)
    assert (tree.stage, tree.counted) == (FIRST, 1)

    tree = learn(tree, [Won(nanos(0.55), 0.8, FIRST, rounds=0)], of)
    assert (tree.stage, tree.counted) == ((0, 2), 0)
    assert tree.width(of) == pytest.approx(0.05)


def test_a_late_lesson_of_an_old_stage_only_cuts() -> None:
    """Its weight was of another rate, so it moves nothing that is learnt now."""
    of = rules(20, win_only=True)
    tree = Tree(rounds=100, stage=(7, 2))
    late: list[Lesson] = [
        Won(nanos(0.4), 0.5, (3, 2), 0),
        Worth(nanos(0.4), 0.5, (3, 2), nanos(0.9)),
    ]

    assert learn(tree, late, of) == replace(tree, steps=((8, 0),), lessons=1)


def test_outcomes_that_cannot_teach_are_counted_and_nothing_more() -> None:
    """No bid beats a price at the cap, or a tie at the top; a lost epoch has no chance."""
    of = rules(20, win_only=False, rate=0.5)
    beyond: list[Lesson] = [
        Won(SCALE, 0.0, FIRST),
        Lost(SCALE + 1, FIRST),
        Won(SCALE - 1, 0.0, FIRST),
    ]
    worth: list[Lesson] = [
        Worth(SCALE, 0.0, FIRST, 5),
        Worth(SCALE - 1, 0.0, FIRST, 5),
        Worth(9, None, FIRST, 5),
    ]
    unweighed: list[Lesson] = [
        Won(9, None, FIRST),
        Won(9, 0.5, None),
        Lost(None, FIRST),
        Lost(9, None),
    ]

    tree = learn(Tree.fresh(), [*beyond, *worth, *unweighed, Passed(2)], of)
    assert tree == Tree(rounds=9, beyond=3, unweighed=4)


def test_a_win_only_tree_learns_nothing_from_a_loss() -> None:
    """Not even a cut, though the price be known."""
    of = rules(20, win_only=True, rate=0.5)

    assert learn(Tree.fresh(), [Lost(nanos(0.4), FIRST)], of) == Tree(rounds=1)


def test_a_price_seen_again_adds_to_its_tick() -> None:
    """A repeated price makes no new interval, but counts again."""
    of = rules(20, win_only=False, rate=0.5)
    tree = learn(Tree.fresh(), [Lost(nanos(0.4), FIRST)] * 3, of)

    assert tree.steps == ((8, 3 * (UNITS // 2)),)


@pytest.mark.parametrize("win_only", [False, True])
def test_no_part_of_the_mass_is_lost(win_only: bool) -> None:
    """However far the weights lie apart, all masses are one within a unit a cell, none is 0."""
    of = rules(1000, win_only, rate=0.01)
    steps = tuple((tick, (-1) ** tick * tick * UNITS) for tick in range(1, 1000))
    for tree in (Tree.fresh(), Tree(steps=steps), Tree(steps=((1, 10**4 * UNITS),))):
        now = law(tree, of)
        assert abs(now.total - UNITS) <= 1000
        assert min(now.masses) >= 1
        assert now.forced == (round(0.01 * UNITS) if win_only else 0)
        assert now.chance_above(SCALE - nanos(0.001)) > 0.0


def test_a_law_is_weight_times_width() -> None:
    """A split that changes no weight changes no chance, whatever its place."""
    of = rules(20, win_only=False, rate=0.5)
    for tick in range(1, 20):
        assert law(Tree(steps=((tick, 0),)), of) == law(Tree.fresh(), of)
