"""Figures over seeds, against numpy and by hand: means, errors, spans, curves, regret."""

from __future__ import annotations

import math
from collections import Counter
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from scipy import stats

from service.rehearsal.figures import (
    POINTS,
    Run,
    differences,
    figure,
    money_figure,
    policy_figures,
    price_figure,
    run_of,
)
from service.rehearsal.player import Auction
from service.rehearsal.taken import PASSED, Columns, Taken
from tests.rehearsal.orders import config

# Least bid that wins, worth, bid: two wins of surplus 60 - 20 and 10 - 30, a loss and a pass.
ROWS = [(20, 60, 40), (30, 10, 40), (50, 90, 40), (10, 90, PASSED)]


def columns_of(rows: list[tuple[int, int, int]], known: bool = True) -> Columns:
    """Second-price auctions of these; values as they count, or known to nobody."""
    taken = Taken()
    for least, worth, bid in rows:
        won = bid != PASSED and least <= bid
        auction = Auction(0, least, worth if known else None, worth)
        taken.add(auction, bid, least if won else 0, won, False)
    return taken.columns


def run(rows: list[tuple[int, int, int]], **changes: Any) -> Run:
    """One run of these auctions."""
    return run_of(columns_of(rows), config("flat", **{"bid_cap": 100, **changes}), "second")


def test_a_run_by_hand() -> None:
    """Counts, cost and surplus add up, and each auction of a short run is a point."""
    found = run(ROWS)
    assert (found.rounds, found.bids, found.wins, found.value) == (4, 3, 2, 70)
    assert found.ends.tolist() == [1, 2, 3, 4]
    assert found.surplus.tolist() == [40.0, 20.0, 20.0, 20.0]
    assert found.spend.tolist() == [20.0, 50.0, 50.0, 50.0]
    assert found.bid[:3].tolist() == [40.0, 40.0, 40.0]
    assert math.isnan(found.bid[3])


def test_the_best_fixed_bid_of_a_run_by_hand() -> None:
    """A bid of 50 would have won all: 40 - 20 + 40 + 80 = 140, and a cap of 20 leaves 120."""
    best = run(ROWS).best
    assert best is not None
    assert (best.bid, best.surplus) == (50, 140)
    capped = run(ROWS, bid_cap=20).best
    assert capped is not None
    assert (capped.bid, capped.surplus) == (20, 120)


def test_fees_make_the_best_fixed_bid_dearer() -> None:
    """Half a price on top and two for each: 32, 47, 77 and 17 against 60, 10, 90 and 90."""
    best = run(ROWS, fees={"share": 5 * 10**8, "cpm": 2}).best
    assert best is not None
    assert (best.bid, best.surplus) == (32, 28 + 73)


def test_without_values_there_is_no_best_bid_and_it_says_so() -> None:
    """Regret is not reckoned from what nobody knows."""
    own = config("flat", bid_cap=100)
    found = run_of(columns_of(ROWS, known=False), own, "second")
    assert found.best is None
    assert (found.unvalued, found.exact) == (2, 0)
    said = policy_figures("one", own, [found], Counter())
    assert (said["regret"], said["best_fixed"]) == (None, None)
    assert "not known" in said["regret_unknown"]
    assert said["wins_of_unknown_value"]["mean"] == 2.0


def test_a_run_of_no_auctions_is_nothing() -> None:
    """Its figures are 0 and its curve has no points."""
    found = run([])
    assert (found.rounds, found.bids, found.wins, found.ends.size) == (0, 0, 0, 0)
    said = policy_figures("one", config("flat"), [found], Counter())
    assert said["surplus"]["mean_nanos"] == 0
    assert said["curve"] == []


@pytest.mark.parametrize("rounds", [1, POINTS - 1, POINTS, POINTS + 1, 10 * POINTS + 3])
def test_points_rise_to_the_last_auction(rounds: int) -> None:
    """At most forty, no two alike, none before the first auction, the last at the end."""
    ends = run([(1, 2, 3)] * rounds).ends.tolist()
    assert len(ends) == min(rounds, POINTS)
    assert ends == sorted(set(ends))
    assert ends[0] >= 1
    assert ends[-1] == rounds


@given(
    some.lists(
        some.tuples(some.integers(0, 99), some.integers(0, 99), some.integers(-1, 99)),
        min_size=1,
        max_size=90,
    )
)
def test_the_last_point_is_the_sum(rows: list[tuple[int, int, int]]) -> None:
    """Surplus and cost at the end are those of the wins one by one, in any order of auctions."""
    won = [(least, worth) for least, worth, bid in rows if bid != PASSED and least <= bid]
    for found in (run(rows), run(rows[::-1])):
        assert found.spend[-1] == sum(least for least, _ in won)
        assert found.surplus[-1] == sum(worth - least for least, worth in won)
        assert found.wins == len(won)


@given(
    some.lists(
        some.tuples(some.integers(0, 99), some.integers(0, 99), some.integers(-1, 99)),
        min_size=1,
        max_size=30,
    )
)
def test_a_flat_bid_never_beats_the_best_flat_bid(rows: list[tuple[int, int, int]]) -> None:
    """Whatever it is, it earns at most what the best one earns, which earns at least nothing."""
    best = run(rows).best
    assert best is not None
    assert best.surplus >= 0
    for bid in (1, 10, 50, 99):
        flat = run([(least, worth, bid) for least, worth, _ in rows])
        assert flat.surplus[-1] <= best.surplus


@pytest.mark.parametrize("numbers", [[1.0, 2.0], [3.0, 3.0, 3.0], [5.0, -1.0, 0.5, 1e9]])
def test_a_figure_is_that_of_scipy(numbers: list[float]) -> None:
    """Mean, standard error (scipy.stats.sem) and the 10th and 90th percentile by numpy."""
    found = figure(numbers)
    assert found["mean"] == pytest.approx(float(np.mean(numbers)))
    assert found["error"] == pytest.approx(float(stats.sem(numbers)))
    assert (found["low"], found["high"]) == pytest.approx(tuple(np.percentile(numbers, [10, 90])))


def test_one_seed_has_no_standard_error() -> None:
    """One number says nothing of its own luck, which is no error of 0."""
    assert figure([7.0]) == {"mean": 7.0, "error": None, "low": 7.0, "high": 7.0}
    assert money_figure([7.4])["error_nanos"] is None


def test_a_span_by_hand() -> None:
    """Eleven seeds from 0 to 10: a tenth of them lies below 1 and a tenth above 9."""
    found = figure([float(number) for number in range(11)])
    assert (found["low"], found["high"], found["mean"]) == (1.0, 9.0, 5.0)
    assert found["error"] == pytest.approx(1.0)


@pytest.mark.parametrize(("make", "unit"), [(money_figure, "_nanos"), (price_figure, "_cpm_nanos")])
def test_amounts_are_whole_nanos_under_their_unit(make: Any, unit: str) -> None:
    """Every name ends with the unit, and no fraction of a nano is left."""
    found = make([1.2, 2.9, 4.6])
    assert set(found) == {f"{name}{unit}" for name in ("mean", "error", "low", "high")}
    assert all(isinstance(number, int) for number in found.values())
    assert found[f"mean{unit}"] == 3


@given(some.lists(some.floats(-1e12, 1e12), min_size=1, max_size=20), some.randoms())
def test_a_figure_does_not_hang_on_the_order_of_seeds(numbers: list[float], chance: Any) -> None:
    """Its span is inside the range of the numbers, and shuffled seeds say the same."""
    found, mixed = figure(numbers), list(numbers)
    chance.shuffle(mixed)
    assert min(numbers) <= found["low"] <= found["high"] <= max(numbers)
    assert figure(mixed)["mean"] == pytest.approx(found["mean"], rel=1e-9, abs=1e-3)
    assert figure(mixed)["low"] == found["low"]


def test_differences_are_taken_seed_by_seed() -> None:
    """Luck that both share cancels: 10 more on every seed is 10 with no error at all."""
    lucky = [[(10, 1000, 50)], [(10, 20, 50)]]
    first = [run(rows) for rows in lucky]
    second = [run([(*rows[0][:1], rows[0][1] + 10, 50)]) for rows in lucky]
    (found,) = differences(["first", "second"], [first, second])
    assert (found["policy"], found["than"]) == ("second", "first")
    assert found["surplus"]["mean_nanos"] == 10
    assert found["surplus"]["error_nanos"] == 0


def test_one_policy_differs_from_nobody() -> None:
    """There is nothing to compare with."""
    assert differences(["alone"], [[run(ROWS)]]) == []


def test_regret_is_the_best_bid_less_the_own() -> None:
    """140 could be earned and 20 was."""
    own = config("flat", bid_cap=100)
    said = policy_figures("one", own, [run(ROWS)], Counter())
    assert said["regret"]["mean_nanos"] == 120
    assert said["best_fixed"]["bid_cpm_nanos"] == 50
    assert said["best_fixed"]["surplus"]["mean_nanos"] == 140


def test_passes_are_means_over_seeds_in_a_steady_order() -> None:
    """Counts of all seeds are divided by their number."""
    said = policy_figures(
        "one", config("flat"), [run(ROWS)] * 4, Counter(under_floor=2, budget_held=4)
    )
    assert list(said["passes"].items()) == [("budget_held", 1.0), ("under_floor", 0.5)]


def test_what_nobody_told_is_spent_but_in_no_budget() -> None:
    """50 were paid, 20 of them unheard: the spend says 50 and the budget of 100 knows of 30."""
    own = config("flat", bid_cap=100, budget=100)
    found = run_of(columns_of(ROWS), own, "second", (1, 20))
    said = policy_figures("one", own, [found], Counter())
    assert said["spend"]["mean_nanos"] == 50
    assert said["budget_share"]["mean"] == pytest.approx(0.3)
    assert said["outcomes_never_told"]["mean"] == 1.0
    assert said["spend_never_told"]["mean_nanos"] == 20


def test_words_of_replays_are_left_out_where_all_is_known() -> None:
    """A figure that is always 0 would only raise questions."""
    said = policy_figures("one", config("flat"), [run(ROWS)], Counter())
    absent = {"surplus_exact", "wins_of_unknown_value", "outcomes_never_told", "regret_unknown"}
    assert absent.isdisjoint(said)


def test_a_curve_leaves_seeds_without_bids_out_of_the_mean_bid() -> None:
    """Of bids 40 and none the mean is 40, and where nobody bid there is no mean."""
    runs = [run([(50, 1, 40), (50, 1, PASSED)]), run([(50, 1, PASSED), (50, 1, PASSED)])]
    curve = policy_figures("one", config("flat"), runs, Counter())["curve"]
    assert [row["bid_cpm_nanos"] for row in curve] == [40, None]
    assert [row["auction"] for row in curve] == [1, 2]
