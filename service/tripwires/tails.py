"""How unlikely a count is: exact tails, apart from the rules so that they meet published values.

Poisson and binomial tails and their exact limits: F. Garwood, "Fiducial limits for the Poisson
distribution", Biometrika 28, 1936; C. J. Clopper and E. S. Pearson, "The use of confidence or
fiducial limits illustrated in the case of the binomial", Biometrika 26, 1934. Two Poisson counts
are compared by the binomial that is left when their sum is given: J. Przyborowski and
H. Wilenski, "Homogeneity of results in testing samples from Poisson series", Biometrika 31, 1940.
Counts that vary more than their law says are divided by the factor by which they do (quasi
likelihood: R. W. M. Wedderburn, Biometrika 61, 1974); that part is an approximation, no theorem.
"""

from __future__ import annotations

from collections.abc import Sequence

from scipy.special import betainc, betaincinv, gammainc, gammaincc, gammaincinv, stdtr

Pair = tuple[float, float]  # A count, and the trials or the exposure it came from.
LIMITS = 0.01  # History is taken at the least favourable end of its exact 99 % limits.


def poisson_at_least(count: float, mean: float) -> float:
    """The chance of `count` or more where `mean` are expected."""
    return 1.0 if count <= 0 else float(gammainc(count, mean))


def poisson_at_most(count: float, mean: float) -> float:
    """The chance of `count` or fewer where `mean` are expected."""
    return float(gammaincc(count + 1, mean))


def poisson_limits(count: float, alpha: float) -> Pair:
    """The exact two-sided limits of a mean of which `count` were seen."""
    low = 0.0 if count <= 0 else float(gammaincinv(count, alpha / 2))
    return low, float(gammaincinv(count + 1, 1 - alpha / 2))


def binomial_at_least(count: float, trials: float, share: float) -> float:
    """The chance of `count` or more successes in so many trials."""
    if count <= 0:
        return 1.0
    return 0.0 if count > trials else float(betainc(count, trials - count + 1, share))


def binomial_at_most(count: float, trials: float, share: float) -> float:
    """The chance of `count` or fewer successes in so many trials."""
    return 1.0 if count >= trials else float(betainc(trials - count, count + 1, 1 - share))


def binomial_limits(count: float, trials: float, alpha: float) -> Pair:
    """The exact two-sided limits of a share of which `count` of `trials` were seen."""
    low = 0.0 if count <= 0 else float(betaincinv(count, trials - count + 1, alpha / 2))
    high = 1.0 if count >= trials else float(betaincinv(count + 1, trials - count, 1 - alpha / 2))
    return low, high


def spread_of_rates(history: Sequence[Pair]) -> float:
    """By what factor counts vary more than Poisson counts of one rate would; at least 1."""
    return max(1.0, _variance_ratio(history))


def spread_of_shares(history: Sequence[Pair]) -> float:
    """By what factor counts vary more than binomial counts of one share would; at least 1."""
    total, trials = sum(k for k, _ in history), sum(n for _, n in history)
    if not 0 < total < trials:
        return 1.0
    # Bounded only here: binomial counts vary less than Poisson counts, the more so the larger
    # their share, and a bound before the division would make them look wild.
    return max(1.0, _variance_ratio(history) / (1 - total / trials))


def _variance_ratio(history: Sequence[Pair]) -> float:
    """Pearson's chi-square over its degrees of freedom; 0 where there is nothing to compare."""
    total, exposure = sum(k for k, _ in history), sum(n for _, n in history)
    if len(history) < 2 or total <= 0:
        return 0.0
    rate = total / exposure
    squares = sum((k - n * rate) ** 2 / (n * rate) for k, n in history if n > 0)
    return squares / (len(history) - 1)


def rates_tail(now: Pair, history: Sequence[Pair], *, upper: bool) -> float:
    """The chance of such a count now, or one further off, at the rate of the history."""
    spread = spread_of_rates(history)
    total, exposure = sum(k for k, _ in history) / spread, sum(n for _, n in history)
    count, share = now[0] / spread, now[1] / (exposure + now[1])
    # Given the sum of both counts, the newer one is binomial: no rate has to be guessed.
    tail = binomial_at_least if upper else binomial_at_most
    return tail(count, total + count, share)


def shares_tail(now: Pair, history: Sequence[Pair], *, upper: bool) -> float:
    """The chance of such a share now, or one further off, at the share of the history."""
    spread = spread_of_shares(history)
    total, trials = (sum(pair[at] for pair in history) / spread for at in (0, 1))
    low, high = binomial_limits(total, trials, LIMITS)
    count, of = now[0] / spread, now[1] / spread
    return binomial_at_least(count, of, high) if upper else binomial_at_most(count, of, low)


def student_two_sided(distance: float, freedom: float) -> float:
    """The chance of a mean so many standard errors off, or further."""
    return float(2 * stdtr(freedom, -abs(distance)))
