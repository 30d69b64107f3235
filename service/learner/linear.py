"""A value that is linear in hashed features, with the ellipsoid in which its weights lie.

Ridge regression after Abbasi-Yadkori, Pál, Szepesvári, "Improved algorithms for linear
stochastic bandits", NeurIPS 2011. Amounts may have any unit; noise R and length S of the
weights are in the same one. The theorem lets each bid depend on all values before it; values
that come late, windows and budgets are not in it. Where values are rare the ellipsoid is wider
than the cap for ever, and says nothing.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from service.learner.arrays import Numbers, double

DIMENSIONS_MAX = 64
LESSONS_BETWEEN_FACTORINGS = 2048
LESSONS_BETWEEN_CHECKS = 256
DRIFT_MAX = 1e-9


class BadLesson(ValueError):
    """A vector of another length, or a number that is not finite."""


class Lesson(NamedTuple):
    """
    One impression, or a word on its value.

    Args:
        features: Its vector x.
        amount: Value to add.
        first: Whether the impression is not counted yet; else the amount corrects or adds to
            what was told of it before, 0 included.
    """

    features: Numbers
    amount: float
    first: bool = True


@dataclass(frozen=True, slots=True)
class Ridge:
    """
    What is learnt of the weights.

    The matrix and its inverse are both kept: the inverse depends on the way it came about, and
    a fold in pieces must end in the same bytes as one at once.

    Args:
        penalty: The ridge, lambda.
        matrix: V = lambda I + sum of x x'.
        inverse: Its inverse, by Sherman and Morrison, made anew from V every so often.
        moment: Sum of amount times x.
        log_det: ln det V - d ln lambda.
        lessons: Impressions counted.
    """

    penalty: float
    matrix: Numbers
    inverse: Numbers
    moment: Numbers
    log_det: float = 0.0
    lessons: int = 0

    @staticmethod
    def fresh(dimensions: int, penalty: float = 1.0) -> Ridge:
        """Before the first lesson: V = lambda I."""
        unit = np.eye(dimensions)
        return Ridge(penalty, penalty * unit, unit / penalty, np.zeros(dimensions))

    @property
    def dimensions(self) -> int:
        """Length of the vectors."""
        return len(self.moment)

    @property
    def weights(self) -> Numbers:
        """The ridge estimate V^-1 sum of amount times x."""
        return double(self.inverse @ self.moment)

    @property
    def drift(self) -> float:
        """The largest entry of V V^-1 - I, which rounding lets grow."""
        return float(np.abs(self.matrix @ self.inverse - np.eye(self.dimensions)).max())

    def mean(self, features: ArrayLike) -> Numbers:
        """weights' x for one vector or one in each row."""
        return double(double(features) @ self.weights)

    def width(self, features: ArrayLike) -> Numbers:
        """sqrt(x' V^-1 x), for one vector or one in each row."""
        x = double(features)
        return double(np.sqrt(np.maximum((x @ self.inverse * x).sum(axis=-1), 0.0)))

    def upper(self, features: ArrayLike, noise: float, length: float, delta: float) -> Numbers:
        """The largest value over the ellipsoid: mean + radius times width."""
        radius = ellipsoid_radius(self.log_det, self.penalty, noise, length, delta)
        return double(self.mean(features) + radius * self.width(features))


def ellipsoid_radius(
    log_det: ArrayLike, penalty: float, noise: float, length: float, delta: float
) -> Numbers:
    """
    R sqrt(2 ln(det(V)^(1/2) det(lambda I)^(-1/2) / delta)) + sqrt(lambda) S.

    Abbasi-Yadkori, Pál, Szepesvári, NeurIPS 2011, Theorem 2: with chance 1 - delta the true
    weights are within it at all times at once, in the norm of V.

    Args:
        log_det: ln det V - ln det lambda I.
        penalty: lambda.
        noise: R, the noise being R-sub-Gaussian; half the range for bounded values.
        length: S, no less than the length of the true weights.
        delta: Chance to be outside.
    """
    spread = np.sqrt(np.maximum(double(log_det) - 2.0 * np.log(delta), 0.0))
    return double(noise * spread + np.sqrt(penalty) * length)


def plain_radius(
    rounds: ArrayLike,
    dimensions: int,
    penalty: float,
    noise: float,
    length: float,
    delta: float,
    square: float = 1.0,
) -> Numbers:
    """
    R sqrt(d ln((1 + t L^2 / lambda) / delta)) + sqrt(lambda) S, without the determinant.

    Arguments as for `ellipsoid_radius`, with `square` L^2 no less than any |x|^2.
    """
    inside = dimensions * np.log((1.0 + double(rounds) * square / penalty) / delta)
    return double(noise * np.sqrt(inside) + np.sqrt(penalty) * length)


def linucb_alpha(delta: float) -> float:
    """1 + sqrt(ln(2 / delta) / 2) of Li, Chu, Langford, Schapire, WWW 2010 (from memory)."""
    return float(1.0 + np.sqrt(np.log(2.0 / delta) / 2.0))


def discounted_radius(
    gamma: float,
    rounds: ArrayLike,
    dimensions: int,
    penalty: float,
    noise: float,
    length: float,
    delta: float,
    square: float = 1.0,
) -> Numbers:
    """
    R sqrt(2 ln(1/delta) + d ln(1 + L^2 (1 - g^2t) / (lambda d (1 - g^2)))) + sqrt(lambda) S.

    Russac, Vernade, Cappé, "Weighted linear bandits for non-stationary environments", NeurIPS
    2019 (from memory). Theirs is the norm of V^-1 W V^-1, W with squared weights; W is no
    larger than V, so that of V^-1, which `width` has, is no narrower and needs no second matrix.
    """
    gone = (1.0 - gamma ** (2.0 * double(rounds))) / (1.0 - gamma**2)
    inside = dimensions * np.log1p(square * gone / (penalty * dimensions))
    return double(noise * np.sqrt(inside - 2.0 * np.log(delta)) + np.sqrt(penalty) * length)


def learn(ridge: Ridge, lessons: Iterable[Lesson]) -> Ridge:
    """
    Add lessons, one at a time in their order; pure.

    V^-1 <- V^-1 - (V^-1 x)(V^-1 x)' / (1 + x' V^-1 x), and ln det V grows by the logarithm of
    that divisor (Sherman and Morrison).

    Raises:
        BadLesson: See there; the ridge given is as it was.
    """
    matrix, inverse, moment = (x.copy() for x in (ridge.matrix, ridge.inverse, ridge.moment))
    log_det, count = ridge.log_det, ridge.lessons
    for lesson in lessons:
        x = _checked(lesson, len(moment))
        moment += lesson.amount * x
        if not lesson.first:
            continue
        turned = inverse @ x
        grown = 1.0 + float(x @ turned)
        matrix += np.outer(x, x)
        # Halved between both factors, so that it stays symmetric to the last bit.
        shared = turned / np.sqrt(grown)
        inverse -= np.outer(shared, shared)
        log_det += float(np.log(grown))
        count += 1
        if _due(matrix, inverse, count):
            inverse, log_det = factored(matrix, ridge.penalty)
    return Ridge(ridge.penalty, matrix, inverse, moment, log_det, count)


def _checked(lesson: Lesson, dimensions: int) -> Numbers:
    x = double(lesson.features)
    if x.shape != (dimensions,) or not np.isfinite(x).all() or not np.isfinite(lesson.amount):
        raise BadLesson("a vector of another length, or a number that is not finite")
    return x


def _due(matrix: Numbers, inverse: Numbers, count: int) -> bool:
    # By count, not by time, so that every fold does it at the same lessons.
    if count % LESSONS_BETWEEN_FACTORINGS == 0:
        return True
    if count % LESSONS_BETWEEN_CHECKS:
        return False
    return bool(np.abs(matrix @ inverse - np.eye(len(matrix))).max() > DRIFT_MAX)


def factored(matrix: Numbers, penalty: float) -> tuple[Numbers, float]:
    """The inverse of V, symmetric to the last bit, and ln det V - d ln lambda, by Cholesky."""
    lower = np.linalg.cholesky(matrix)
    half = np.linalg.solve(lower, np.eye(len(matrix)))
    log_det = 2.0 * float(np.log(np.diag(lower)).sum()) - len(matrix) * float(np.log(penalty))
    inverse = half.T @ half
    # The product is symmetric, but the rounding of its two halves need not be.
    return double(0.5 * (inverse + inverse.T)), log_det


def discount(ridge: Ridge, gamma: float) -> Ridge:
    """
    V <- gamma V + (1 - gamma) lambda I and gamma times the moment; the ridge itself stays.

    Russac, Vernade, Cappé, NeurIPS 2019, do so before each lesson. A factor per moment instead
    is the same for lessons of one moment, and pays for the new inverse once.

    Args:
        ridge: What was learnt.
        gamma: What is kept, above 0, at most 1.
    """
    if not 0.0 < gamma <= 1.0:
        raise ValueError("a share is kept, above 0 and at most 1")
    ground = (1.0 - gamma) * ridge.penalty * np.eye(ridge.dimensions)
    matrix = double(gamma * ridge.matrix + ground)
    inverse, log_det = factored(matrix, ridge.penalty)
    moment = double(gamma * ridge.moment)
    return replace(ridge, matrix=matrix, inverse=inverse, moment=moment, log_det=log_det)
