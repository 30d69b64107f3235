"""Ridge, ellipsoid and their upkeep against worked numbers, plain algebra and a covered truth.

Numbers were computed apart from this code from the formulas of Abbasi-Yadkori, Pál, Szepesvári,
"Improved algorithms for linear stochastic bandits", NeurIPS 2011, to ten digits.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from service.learner import linear
from service.learner.arrays import Numbers
from service.learner.linear import BadLesson, Lesson, Ridge

THREE = [
    Lesson(np.array([1.0, 0.0]), 1.0),
    Lesson(np.array([0.0, 1.0]), 0.0),
    Lesson(np.array([1.0, 1.0]), 1.0),
]
ONE = np.array([1.0, 0.0])
CLOSE = 1e-8


def _drawn(count: int, dimensions: int, seed: int) -> list[Lesson]:
    rng = np.random.default_rng(seed)
    vectors = rng.standard_normal((count, dimensions))
    return [Lesson(x, float(y)) for x, y in zip(vectors, rng.random(count), strict=True)]


def _plain(lessons: list[Lesson], penalty: float) -> tuple[Numbers, Numbers]:
    vectors = np.array([one.features for one in lessons])
    amounts = np.array([one.amount for one in lessons])
    matrix = penalty * np.eye(vectors.shape[1]) + vectors.T @ vectors
    return matrix, vectors.T @ amounts


def test_three_lessons_by_hand() -> None:
    """V = [[3,1],[1,3]], det 8, weights (.625, .125), inverse [[.375,-.125],[-.125,.375]]."""
    ridge = linear.learn(Ridge.fresh(2), THREE)
    assert ridge.matrix.tolist() == [[3.0, 1.0], [1.0, 3.0]]
    assert float(np.exp(ridge.log_det)) == pytest.approx(8.0, abs=CLOSE)
    assert ridge.weights == pytest.approx([0.625, 0.125], abs=CLOSE)
    expected = [0.375, -0.125, -0.125, 0.375]
    assert ridge.inverse.ravel() == pytest.approx(expected, abs=CLOSE)


def test_the_ellipsoid_by_hand() -> None:
    """R = .5, S = 1, delta = .05: radius, width of (1, 0) and upper end."""
    ridge = linear.learn(Ridge.fresh(2), THREE)
    radius = linear.ellipsoid_radius(ridge.log_det, 1.0, 0.5, 1.0, 0.05)
    assert float(radius) == pytest.approx(2.420467008, abs=CLOSE)
    assert float(ridge.width(ONE)) == pytest.approx(0.6123724357, abs=CLOSE)
    assert float(ridge.upper(ONE, 0.5, 1.0, 0.05)) == pytest.approx(2.107227278, abs=CLOSE)


def test_other_radii_by_hand() -> None:
    """Without the determinant, L^2 = 2, t = 3; and LinUCB's alpha; both at delta = .05."""
    plain = linear.plain_radius(3, 2, 1.0, 0.5, 1.0, 0.05, square=2.0)
    assert float(plain) == pytest.approx(2.571884605, abs=CLOSE)
    assert linear.linucb_alpha(0.05) == pytest.approx(2.358101516, abs=CLOSE)


def test_the_discounted_radius() -> None:
    """By the formula at g = .99, t = 100, d = 2; towards g = 1 the sum is t."""
    gone = (1 - 0.99**200) / (1 - 0.99**2)
    expected = 0.5 * np.sqrt(2 * np.log(20) + 2 * np.log(1 + gone / 2)) + 1
    radius = linear.discounted_radius(0.99, 100, 2, 1.0, 0.5, 1.0, 0.05)
    assert float(radius) == pytest.approx(expected, abs=1e-12)
    near_one = linear.discounted_radius(1 - 1e-9, 100, 2, 1.0, 0.5, 1.0, 0.05)
    expected = 0.5 * np.sqrt(2 * np.log(20) + 2 * np.log(51)) + 1
    assert float(near_one) == pytest.approx(expected, abs=1e-5)


@pytest.mark.parametrize("dimensions", [1, 16, 64])
def test_many_lessons_are_plain_ridge_regression(dimensions: int) -> None:
    """5,000 one at a time, as numpy solves them all at once; the drift stays below 1e-9."""
    lessons = _drawn(5_000, dimensions, 1)
    ridge = linear.learn(Ridge.fresh(dimensions, 2.0), lessons)
    matrix, moment = _plain(lessons, 2.0)
    assert ridge.weights == pytest.approx(np.linalg.solve(matrix, moment), abs=1e-10)
    assert ridge.log_det == pytest.approx(np.linalg.slogdet(matrix / 2.0)[1], abs=1e-8)
    assert ridge.drift < 1e-9
    x = lessons[0].features
    assert float(ridge.width(x)) == pytest.approx(np.sqrt(x @ np.linalg.inv(matrix) @ x))
    assert (ridge.inverse == ridge.inverse.T).all()


def test_a_drift_is_mended() -> None:
    """Vectors that almost lie on one line ruin the inverse; the checks make it anew."""
    rng = np.random.default_rng(2)
    base = 1e4 * np.ones(8)
    lessons = [Lesson(base + 1e-3 * rng.standard_normal(8), 1.0) for _ in range(255)]
    worn = linear.learn(Ridge.fresh(8, 1e-4), lessons)
    mended = linear.learn(worn, lessons[:1])
    assert worn.drift > linear.DRIFT_MAX
    assert mended.lessons == linear.LESSONS_BETWEEN_CHECKS
    assert mended.drift < 0.01 * worn.drift


def test_a_later_word_moves_the_amount_alone() -> None:
    """First 0, then 3, then 1 less: as if 2 had been told at once."""
    told = [Lesson(ONE, 0.0), Lesson(ONE, 3.0, first=False), Lesson(ONE, -1.0, first=False)]
    assert linear.learn(Ridge.fresh(2), told).weights == pytest.approx([1.0, 0.0])
    assert linear.learn(Ridge.fresh(2), told).lessons == 1


def test_forgetting_follows_the_recursion() -> None:
    """gamma V + (1 - gamma) lambda I each time, against sums with weights gamma^age."""
    lessons, gamma, ridge = _drawn(50, 4, 3), 0.9, Ridge.fresh(4, 2.0)
    for lesson in lessons:
        ridge = linear.learn(linear.discount(ridge, gamma), [lesson])
    aged = gamma ** np.arange(49, -1, -1)
    vectors = np.array([one.features for one in lessons])
    matrix = 2.0 * np.eye(4) + (vectors * aged[:, None]).T @ vectors
    moment = (vectors * aged[:, None]).T @ np.array([one.amount for one in lessons])
    assert ridge.matrix.ravel() == pytest.approx(matrix.ravel(), abs=1e-10)
    assert ridge.weights == pytest.approx(np.linalg.solve(matrix, moment), abs=1e-10)
    assert ridge.log_det == pytest.approx(np.linalg.slogdet(matrix / 2.0)[1], abs=1e-10)


@pytest.mark.parametrize("gamma", [0.0, -0.1, 1.01, float("nan")])
def test_a_share_that_is_none_is_refused(gamma: float) -> None:
    """Nothing kept would be a reset, which is another thing."""
    with pytest.raises(ValueError, match="share"):
        linear.discount(Ridge.fresh(2), gamma)


@pytest.mark.parametrize(
    "lesson",
    [
        Lesson(np.ones(3), 1.0),
        Lesson(np.array([1.0, np.nan]), 1.0),
        Lesson(ONE, float("inf")),
    ],
)
def test_a_bad_lesson_is_refused_and_nothing_changed(lesson: Lesson) -> None:
    """The good lesson before it does not count either."""
    ridge = Ridge.fresh(2)
    with pytest.raises(BadLesson):
        linear.learn(ridge, [THREE[0], lesson])
    assert ridge.matrix.tolist() == [[1.0, 0.0], [0.0, 1.0]]
    assert (ridge.lessons, ridge.moment.tolist()) == (0, [0.0, 0.0])


def _missed(next_vector: Callable[[Ridge, np.random.Generator], Numbers], seed: int) -> bool:
    rng = np.random.default_rng(seed)
    truth = np.array([0.5, -0.2, 0.1])
    ridge = Ridge.fresh(3)
    for _ in range(300):
        x = next_vector(ridge, rng)
        noise = 0.5 if rng.random() < 0.5 else -0.5
        ridge = linear.learn(ridge, [Lesson(x, float(truth @ x) + noise)])
        gap = ridge.weights - truth
        radius = linear.ellipsoid_radius(ridge.log_det, 1.0, 0.5, 0.6, 0.1)
        if np.sqrt(gap @ ridge.matrix @ gap) > float(radius):
            return True
    return False


def test_the_ellipsoid_holds_the_truth_at_all_times() -> None:
    """At delta = .1, in at most a tenth of 100 runs is it ever left, with chosen vectors too."""

    def widest(ridge: Ridge, rng: np.random.Generator) -> Numbers:
        choices = rng.standard_normal((5, 3))
        return np.asarray(choices[int(np.argmax(ridge.upper(choices, 0.5, 0.6, 0.1)))])

    assert sum(_missed(widest, seed) for seed in range(100)) <= 10


def test_forgetting_finds_weights_that_turned() -> None:
    """After the weights turned, what forgets is near the new ones and what does not is between."""
    rng, kept, plain = np.random.default_rng(4), Ridge.fresh(4), Ridge.fresh(4)
    for moment in range(60):
        truth = np.array([1.0, 0, 0, 0]) if moment < 30 else np.array([0, 1.0, 0, 0])
        vectors = rng.standard_normal((50, 4))
        lessons = [Lesson(x, float(truth @ x)) for x in vectors]
        kept = linear.learn(linear.discount(kept, 0.8), lessons)
        plain = linear.learn(plain, lessons)
    assert np.abs(kept.weights - truth).max() < 0.02
    assert np.abs(plain.weights - truth).max() > 0.4
