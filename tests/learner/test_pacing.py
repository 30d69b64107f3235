"""The multiplier against worked figures, its bounds, its bytes, and what it does in a market.

Sources: Balseiro, Gur, "Learning in Repeated Auctions with Budgets: Regret Minimization and
Equilibrium", Management Science 65(9):3952-3968, 2019; Balseiro, Lu, Mirrokni, "The Best of
Many Worlds: Dual Mirror Descent for Online Allocation Problems", Operations Research
71(1):101-119, 2023 (ICML 2020). The figures were computed apart from this code, by the rules.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import pacing
from service.learner.pacing import (
    FORMS,
    UNITS,
    Form,
    Pace,
    Rules,
    Seen,
    UnreadablePace,
    learn,
    units,
)

SCALE = 10**9
GUR = Rules("euclidean", units(0.1), SCALE, top=9 * UNITS)


def money(share: float) -> int:
    """A share of the scale in nanos."""
    return round(share * SCALE)


def rules(form: Form, step: float = 0.05, **more: int) -> Rules:
    """Rules of one form, in plain numbers."""
    return Rules(form, units(step), SCALE, **more)


def won(price: int) -> Seen:
    """One round, won where a price was paid."""
    return Seen(1, int(price > 0), price)


@pytest.mark.parametrize("form", FORMS)
def test_a_pace_starts_at_its_guess(form: Form) -> None:
    """Each form takes a multiplier and gives the same back, to 2^-38 of it."""
    pace = Pace.fresh(rules(form), units(0.75))
    assert pace.multiplier(rules(form)) / UNITS == pytest.approx(0.75, rel=1e-11)


def test_check_values_of_adaptive_pacing() -> None:
    """Six rounds of rate 0.1, step 0.1, from 0; bids to ten digits and multipliers exactly."""
    rounds = [
        (1.0, 0.4, 1.0, 0.03),
        (0.8, 0.05, 0.7766990291, 0.025),
        (0.5, 0.3, 0.487804878, 0.045),
        (0.9, 0.2, 0.8612440191, 0.055),
        (0.6, 0.59, 0.5687203791, 0.045),
        (0.1, 0.2, 0.0956937799, 0.035),
    ]
    pace, left = Pace.fresh(GUR), money(2.0)
    for value, rival, bid, after in rounds:
        bids = float(pacing.paced(value, pace.multiplier(GUR)))
        assert bids == pytest.approx(bid, rel=1e-9)
        price = money(rival) if pacing.within(money(bids), left) >= money(rival) else 0
        left -= price
        pace = learn(pace, won(price), money(0.1), GUR)
        assert pace.multiplier(GUR) / UNITS == pytest.approx(after, rel=1e-10)
    assert left == money(1.05)
    assert pace.rounds == 6


def test_check_values_of_the_entropy_form() -> None:
    """Three rounds from 1 with rate 0.1 and step 0.1, to nine digits."""
    form, pace = rules("entropy", 0.1), Pace.fresh(rules("entropy", 0.1), UNITS)
    for price, after in [(0.4, 1.030454534), (0.05, 1.025315121), (0.0, 1.015113065)]:
        pace = learn(pace, won(money(price)), money(0.1), form)
        assert pace.multiplier(form) / UNITS == pytest.approx(after, rel=1e-9)


def test_the_shifted_form_moves_every_bid_by_one_factor() -> None:
    """1 + mu grows by exp(step x overspend / scale), whatever mu is, and mu comes down to 0."""
    form = rules("shifted", 0.1)
    for start in (0.0, 1.0, 30.0):
        pace = learn(Pace.fresh(form, units(start)), won(money(0.4)), money(0.1), form)
        grown = (1.0 + start) * math.exp(0.03)
        assert 1.0 + pace.multiplier(form) / UNITS == pytest.approx(grown, rel=1e-10)
    assert learn(Pace.fresh(form), Seen(9), money(0.9), form).multiplier(form) == 0


def test_the_scale_of_the_shifted_form_follows_prices() -> None:
    """A market a thousand times cheaper is paced alike; one that gets dearer, soon."""
    levels = []
    for unit in (SCALE, SCALE // 1000):
        form = Rules("shifted", units(0.1), 1)
        pace = Pace.fresh(form, UNITS, unit // 2)
        for price in (5, 3, 0, 9):
            pace = learn(pace, won(price * unit // 10), unit // 4, form)
        levels.append(pace.level / UNITS)
    assert levels[0] == pytest.approx(levels[1], rel=1e-6)
    dear = Pace.fresh(form, UNITS, 10)
    for _ in range(1500):
        dear = learn(dear, Seen(1, 1, 4000), 4000, form)
    assert dear.price == pytest.approx(4000, rel=0.1)
    assert pacing.usual_price(SCALE, UNITS) == SCALE // 4


def test_check_values_of_a_rate_that_changes() -> None:
    """Rates .2, .1, .3, prices .3, 0, .3, step .2, from .5: then .52, .5, .5."""
    form, pace = rules("euclidean", 0.2), Pace.fresh(rules("euclidean", 0.2), units(0.5))
    for due, price, after in [(0.2, 0.3, 0.52), (0.1, 0.0, 0.5), (0.3, 0.3, 0.5)]:
        pace = learn(pace, won(money(price)), money(due), form)
        assert pace.multiplier(form) / UNITS == pytest.approx(after, rel=1e-10)


def test_check_values_of_the_dual_bound() -> None:
    """Rate 0.1, 10,000 rounds, from 0: 5070.5 at step 0.01, and 1110 at the best step."""
    best = pacing.best_step(10_000, 0.1)

    assert pacing.regret_bound(10_000, 0.1, 0.01) == pytest.approx(10 + 60.5 + 5000, rel=1e-12)
    assert best == pytest.approx(0.09090909091, rel=1e-9)
    assert pacing.regret_bound(10_000, 0.1, best) == pytest.approx(1110, rel=1e-12)
    assert best / 10_000**-0.5 == pytest.approx(9.1, rel=0.01)
    # A guess of the multiplier shortens the way, and the bound with it.
    assert pacing.regret_bound(10_000, 0.1, best, first=1.0) < 1110


def test_the_first_multiplier_comes_from_a_guessed_market() -> None:
    """Values and prices uniform, rate 0.1: mu = 0.2909944487; a value of 0.5 at 0.02 bids 0.2."""
    fine = (np.arange(200_000) + 0.5) / 200_000
    chances = np.full(fine.size, 1.0 / fine.size)
    both = pacing.first_by_curve(fine.reshape(-1, 50).mean(axis=1), fine, chances, 0.1)
    one = pacing.first_by_curve(0.5, fine, chances, 0.02)

    assert both / UNITS == pytest.approx(0.2909944487, abs=2e-5)
    assert float(pacing.paced(0.5, one)) == pytest.approx(0.2, abs=1e-5)
    assert pacing.first_by_curve(0.5, fine, chances, 0.2) == 0
    assert pacing.first_by_forecast(1.0 / 6.0, 0.1) / UNITS == pytest.approx(0.2909944487, rel=1e-9)
    assert pacing.first_by_forecast(0.1, 0.1) == 0


def test_the_order_of_prices_in_a_guessed_market_is_free() -> None:
    """A curve may come in any order, with gaps in it."""
    given_in_order = pacing.first_by_curve(5.0, [1.0, 2.0, 4.0], [0.5, 0.2, 0.1], 0.6)
    assert given_in_order == pacing.first_by_curve(5.0, [4.0, 1.0, 2.0], [0.1, 0.5, 0.2], 0.6)
    assert float(pacing.paced(5.0, given_in_order)) == pytest.approx(2.0, rel=1e-9)


@pytest.mark.parametrize("form", FORMS)
@given(entries=some.lists(some.tuples(some.integers(0, 99), some.integers(0, 2**62)), max_size=30))
def test_a_pace_stays_between_its_ends_and_survives_its_bytes(
    form: Form, entries: list[tuple[int, int]]
) -> None:
    """Whatever money comes, the multiplier is finite, within its ends, and the same when read."""
    moves = rules(form, top=50 * UNITS, horizon=1000)
    pace = Pace.fresh(moves, UNITS)
    for rounds, spent in entries:
        pace = learn(pace, Seen(rounds, min(rounds, 9), spent), rounds * money(0.1), moves)
        low, high = moves.ends
        assert low <= pace.level <= high
        assert 0 <= pace.multiplier(moves) <= 50 * UNITS * (1 + 1e-9)
        assert 0 <= pace.rounds <= 1000
    assert Pace.from_bytes(pace.to_bytes(moves), moves) == pace


def test_the_bytes_of_other_rules_or_damaged_ones_are_refused() -> None:
    """A level means something only under its rules."""
    pace = Pace(units(0.3), 17, 2**60)
    state = pace.to_bytes(GUR)
    others = [
        *(replace(GUR, form="shifted"), replace(GUR, step=GUR.step + 1)),
        *(replace(GUR, scale=SCALE + 1), replace(GUR, top=UNITS), replace(GUR, horizon=9)),
    ]
    for other in others:
        with pytest.raises(UnreadablePace, match="other rules"):
            Pace.from_bytes(state, other)
    spoilt = [state[:at] + bytes([state[at] ^ 4]) + state[at + 1 :] for at in range(len(state))]
    for wrong in (*spoilt, state[:-1], b"", b"{}", state + b"\0"):
        with pytest.raises(UnreadablePace):
            Pace.from_bytes(wrong, GUR)


def test_an_edit_carries_the_multiplier_over() -> None:
    """Bids go on where they were, whatever form and step come next."""
    pace = Pace(units(0.7), 40)
    for form in FORMS:
        after = pacing.carried(pace, GUR, rules(form, 0.3))
        assert after.multiplier(rules(form, 0.3)) / UNITS == pytest.approx(0.7, rel=1e-11)
        assert after.rounds == 40


def test_the_scale_grows_with_the_money_on_its_way() -> None:
    """Six steps of it, where that is more than a price: 6 x 0.05 x 100 is 30 scales."""
    form = rules("shifted")
    start = Pace.fresh(form, UNITS, SCALE)
    moves = [
        learn(start, won(SCALE), 0, form, late).level - start.level
        for late in (0, 3 * SCALE, 100 * SCALE)
    ]
    assert moves[0] == moves[1] == units(0.05)
    assert moves[2] * 30 == pytest.approx(moves[0], rel=1e-9)


def test_late_outcomes_cost_a_shift_and_no_more() -> None:
    """Prices 500 rounds late: counted with their rounds under 1 %; after a tick, what was open."""
    whole, open_money = 20_000 * 0.1, 500 * 0.1
    assert _spend() == pytest.approx(whole, rel=0.01)
    assert _spend(delay=500) == pytest.approx(whole, rel=0.01)
    assert whole < _spend(delay=500, ticks_first=True) < whole + open_money


def test_the_step_falls_to_its_last_and_forgets_what_is_old() -> None:
    """With a horizon the first steps are larger, and never smaller than the last."""
    moves = rules("euclidean", 0.01, horizon=10_000)
    pace, steps = Pace.fresh(moves, UNITS), []
    for _ in range(40_000):
        after = learn(pace, won(money(0.1)), 0, moves)
        steps.append(after.level - pace.level)
        pace = Pace(UNITS, after.rounds)
    assert steps[0] == pytest.approx(8 * units(0.001), rel=1e-6)
    assert steps == sorted(steps, reverse=True)
    assert steps[-1] == pytest.approx(units(0.001), rel=0.01)


def test_a_larger_first_step_mends_a_bad_guess_sooner() -> None:
    """From a multiplier far too high, more of 4,000 rounds' money is spent."""
    assert _spend(4000, 20.0, horizon=4000) > 1.02 * _spend(4000, 20.0)


@pytest.mark.parametrize("form", FORMS)
def test_pacing_recovers_when_the_floor_rises_only_if_passes_count(form: Form) -> None:
    """A floor above all paced bids: with passes as rounds bids climb over it, else never again."""
    assert _wins_above_the_floor(form, passes_count=True) > 100
    assert _wins_above_the_floor(form, passes_count=False) == 0


def _spend(
    rounds: int = 20_000,
    first: float = 0.29,
    horizon: int = 0,
    delay: int = 0,
    ticks_first: bool = False,
) -> float:
    """Money spent on values and prices uniform, rate 0.1, prices known so many rounds late."""
    rng = np.random.default_rng(11)
    moves = rules("euclidean", 0.01, horizon=horizon)
    pace, paid = Pace.fresh(moves, units(first)), [0] * delay
    for at, (value, rival) in enumerate(rng.random((rounds, 2))):
        bid = float(pacing.paced(value, pace.multiplier(moves)))
        paid.append(money(rival) if bid >= rival else 0)
        due = money(0.1) if ticks_first or at >= delay else 0
        pace = learn(pace, won(paid[-1 - delay]), due, moves)
    return sum(paid) / SCALE


def _wins_above_the_floor(form: Form, passes_count: bool) -> int:
    """Wins after a floor of 0.6 comes up in the middle, for a value of 0.9 at rate 0.05."""
    rng = np.random.default_rng(5)
    moves, wins = rules(form), 0
    pace = Pace.fresh(moves, units(1.8))
    for at, rival in enumerate(rng.random(6000)):
        floor = 0.6 if at >= 2000 else 0.0
        bid = float(pacing.paced(0.9, pace.multiplier(moves)))
        price = money(max(rival, floor)) if bid >= max(rival, floor) else 0
        wins += at >= 2000 and price > 0
        if bid >= floor or passes_count:
            pace = learn(pace, won(price), money(0.05), moves)
    return wins
