"""Change detectors against published formulas, Page's integral equation and simulation.

Sources: Page, "Continuous inspection schemes", Biometrika 41(1/2):100-115, 1954; Lorden,
"Procedures for reacting to a change in distribution", Ann. Math. Statist. 42(6):1897-1908,
1971; Liu, Lee, Shroff, "A change-detection based framework for piecewise-stationary
multi-armed bandit problem", AAAI 2018. Values marked "computed from the formula" were
computed apart from this code.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from numpy.random import Generator
from numpy.typing import NDArray
from scipy import stats

from service.learner import change

RISE = change.bernoulli_increments(0.1, 0.2)


def run_length_one_sided(allowance: float, level: float, shift: float) -> float:
    """
    Mean number of values to an alarm, by Page's integral equation.

    L(z) = 1 + L(0) P(x <= k - z) + integral from 0 to h of L(y) density(y + k - z) dy, by 200
    points of Gauss and Legendre.
    """
    nodes, shares = np.polynomial.legendre.leggauss(200)
    at, widths = 0.5 * level * (nodes + 1.0), 0.5 * level * shares
    starts = np.concatenate([[0.0], at])
    kernel = stats.norm.pdf(at[None, :] + allowance - starts[:, None] - shift) * widths
    system = np.zeros((201, 201))
    system[:, 0] = stats.norm.cdf(allowance - starts - shift)
    system[:, 1:] = kernel
    return float(np.linalg.solve(np.eye(201) - system, np.ones(201))[0])


def run_length(allowance: float, level: float, shift: float) -> float:
    """Two sides watch at once: 1 / L = 1 / L up + 1 / L down."""
    sides = [run_length_one_sided(allowance, level, s) for s in (shift, -shift)]
    return 1.0 / sum(1.0 / side for side in sides)


RUN_LENGTHS = [
    (4.0, 0.0, 167.6837888),
    (4.0, 0.5, 26.63020309),
    (4.0, 1.0, 8.38313187),
    (4.0, 2.0, 3.342770129),
    (5.0, 0.0, 465.443506),
    (5.0, 0.5, 37.99614319),
    (5.0, 1.0, 10.37596992),
    (5.0, 2.0, 4.008871061),
]


@pytest.mark.parametrize(("level", "shift", "length"), RUN_LENGTHS)
def test_run_lengths_of_the_usual_design(level: float, shift: float, length: float) -> None:
    """Page's integral equation at k = .5, solved apart from this code; handbooks print 168 and
    8.38 for h = 4, 465 and 10.4 for h = 5 (from memory)."""
    assert run_length(0.5, level, shift) == pytest.approx(length, rel=1e-8)


def lengths(generator: Generator, level: float, shift: float, runs: int) -> NDArray[np.int64]:
    """Values to the first alarm of `cusum_step`, run by run."""
    up, down, length = np.zeros(runs), np.zeros(runs), np.zeros(runs, dtype=np.int64)
    watching = np.ones(runs, dtype=np.bool_)
    while watching.any():
        up, down = change.cusum_step(up, down, generator.normal(shift, 1.0, runs), 0.0, 0.5)
        length += watching
        watching &= (up < level) & (down < level)
    return length


@pytest.mark.parametrize(("level", "shift"), [(4.0, 0.0), (4.0, 1.0), (5.0, -1.0), (5.0, 0.5)])
def test_the_step_has_the_run_length_of_the_integral_equation(level: float, shift: float) -> None:
    """3,000 simulated runs of the step agree with Page's equation to four standard errors."""
    found = lengths(np.random.default_rng(21), level, shift, 3000)
    error = found.std(ddof=1) / math.sqrt(found.size)

    assert found.mean() == pytest.approx(run_length(0.5, level, shift), abs=4 * error)


@given(some.lists(some.floats(-5.0, 5.0), max_size=20), some.floats(0.0, 2.0))
def test_a_fall_is_a_rise_of_negated_values(values: list[float], allowance: float) -> None:
    """The two sides mirror each other."""
    up = down = mirrored_up = mirrored_down = np.zeros(())
    for x in values:
        up, down = change.cusum_step(up, down, x, 0.25, allowance)
        mirrored_up, mirrored_down = change.cusum_step(
            mirrored_up, mirrored_down, -x, -0.25, allowance
        )

    assert (float(up), float(down)) == pytest.approx((float(mirrored_down), float(mirrored_up)))


def test_bernoulli_increments() -> None:
    """p0 = .1, p1 = .2: ln 2 and ln(8/9) = -0.1177830357, computed from the formula."""
    assert float(change.in_nats(RISE[0])) == pytest.approx(math.log(2), abs=1e-12)
    assert float(change.in_nats(RISE[1])) == pytest.approx(-0.1177830357, abs=5e-11)


def test_bernoulli_trace() -> None:
    """On 0,0,1,0,1,1,0,1; computed from the formula."""
    state, trace = np.zeros((), dtype=np.int64), []
    for success in (0, 0, 1, 0, 1, 1, 0, 1):
        state = change.bernoulli_cusum_step(state, 1, success, RISE)
        trace.append(float(change.in_nats(state)))

    expected = [0, 0, 0.6931471806, 0.5753641449, 1.268511325, 1.961658506, 1.84387547, 2.537022651]
    assert trace == pytest.approx(expected, abs=1e-9)


@given(some.lists(some.booleans(), max_size=60), some.integers(0, 3), some.booleans())
def test_a_batch_never_stands_above_single_steps(
    successes: list[bool], start: int, fall: bool
) -> None:
    """In any order; and it stands where they do unless they were held at 0 on the way."""
    increments = change.bernoulli_increments(0.1, 0.05 if fall else 0.2)
    began = change.in_units(float(start))
    single, held = np.asarray(began), False
    for success in successes:
        held |= bool(int(single) + increments[0 if success else 1] < 0)
        single = change.bernoulli_cusum_step(single, 1, success, increments)
    batch = change.bernoulli_cusum_step(began, len(successes), sum(successes), increments)

    assert int(batch) <= int(single)
    assert held or int(batch) == int(single)


def test_the_state_is_whole_and_stays_so() -> None:
    """A million successes at once, again and again, neither overflow nor leave whole numbers."""
    state = np.zeros(2, dtype=np.int64)
    increments = change.bernoulli_increments(1e-3, 0.99)
    for _ in range(3):
        state = change.bernoulli_cusum_step(state, 10**6, [10**6, 0], increments)

    assert state.dtype == np.int64
    assert state.tolist() == [change.STATE_MAX, 0]


@pytest.mark.parametrize(("after", "level"), [(0.2, 3.0), (0.05, 3.0), (0.12, 2.0)])
def test_false_alarms_are_as_rare_as_lorden_says(after: float, level: float) -> None:
    """At p0 = .1 the mean time to a false alarm is e^level or more, by 1,000 simulated runs."""
    generator, runs = np.random.default_rng(22), 1000
    increments = change.bernoulli_increments(0.1, after)
    state, length = np.zeros(runs, dtype=np.int64), np.zeros(runs)
    watching = np.ones(runs, dtype=np.bool_)
    while watching.any():
        state = change.bernoulli_cusum_step(state, 1, generator.random(runs) < 0.1, increments)
        length += watching
        watching &= state < change.in_units(level)

    assert length.mean() - 3 * length.std() / math.sqrt(runs) > math.exp(level)


def test_a_halved_rate_is_found() -> None:
    """After 1 in 10 has become 1 in 20, level 5 is reached within 600 trials in 95 of 100 runs."""
    generator = np.random.default_rng(23)
    increments, state = change.bernoulli_increments(0.1, 0.05), np.zeros(400, dtype=np.int64)
    found = np.zeros(400, dtype=np.bool_)
    for _ in range(60):
        batch = generator.binomial(10, 0.05, 400)
        state = change.bernoulli_cusum_step(state, 10, batch, increments)
        found |= state >= change.in_units(5.0)

    assert found.mean() > 0.95


def test_page_hinkley_trace() -> None:
    """Tolerance .005, fading .9999 on 0,0,0,0,0,1,1,1; computed from the formula."""
    count = mean = excess = np.zeros(())
    trace = []
    for x in (0, 0, 0, 0, 0, 1, 1, 1):
        count, mean, excess = change.page_hinkley_step(count, mean, excess, x, 0.005, 0.9999)
        trace.append(float(excess))

    assert trace == pytest.approx([0, 0, 0, 0, 0, 0.8283333333, 1.537536214, 2.157382461], abs=1e-9)
    assert float(mean) == pytest.approx(3 / 8)


def test_cusum_ucb_parameters() -> None:
    """Liu, Lee, Shroff, AAAI 2018: 10,000 rounds, 4 changes; computed from the formula."""
    level, exploration = change.cusum_ucb_parameters(10_000, 4)

    assert float(level) == pytest.approx(7.824046011, abs=1e-9)
    assert float(exploration) == pytest.approx(0.05594299245, abs=1e-10)
