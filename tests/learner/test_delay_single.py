"""The fit of one line item finds the rate of the fit of many, to the last bit."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pytest

from service.learner import delay
from service.learner.delay_single import Waiting, rate_of

WINDOW_MS = 604_800_000
CELL_MS = WINDOW_MS // 64
HALVINGS = 12
Bucket = tuple[float, int]


def both(
    converted: int, delay_sum: int, buckets: Sequence[Bucket], mean: float = WINDOW_MS / 4
) -> tuple[float | None, float]:
    """The rate by either way; the last bucket is the oldest."""
    held = tuple(bucket for bucket in buckets if bucket[1])
    single = Waiting(converted, delay_sum, held, buckets[-1][0])
    ages, counts = zip(*buckets, strict=True)
    law = delay.fit(delay.seen(converted, delay_sum, ages, counts), 1.0, mean, HALVINGS)
    return rate_of(single, 1.0, mean, HALVINGS), float(law.rate)


def market(rng: np.random.Generator, share: float) -> tuple[int, int, list[Bucket]]:
    """Some cells of impressions of which so many convert, after delays of any usual length."""
    cells, wins = int(rng.choice([1, 2, 5, 20, 64])), int(rng.choice([1, 3, 30, 1000]))
    mean_ms = float(rng.choice([1, 60_000, 3_600_000, 86_400_000, WINDOW_MS]))
    converted, delay_sum, buckets = 0, 0, list[Bucket]()
    for cell in range(cells, 0, -1):
        age = cell * CELL_MS - int(rng.integers(2 * CELL_MS)) / 2
        delays = rng.exponential(mean_ms, rng.binomial(wins, share)).astype(int)
        came = delays[delays <= age]
        converted, delay_sum = converted + len(came), delay_sum + int(came.sum())
        buckets.append((min(age, WINDOW_MS), wins - len(came)))
    old = int(rng.choice([0, 100]))
    return converted, delay_sum, [*buckets, (float(WINDOW_MS), old)]


@pytest.mark.parametrize("share", [0.001, 0.01, 0.1, 0.5, 0.9, 1.0])
def test_it_is_the_same_rate(share: float) -> None:
    """In usual markets none is too close to tell, and none differs in a bit."""
    rng = np.random.default_rng(7)
    found = [both(*case) for case in (market(rng, share) for _ in range(60)) if case[0]]

    assert len(found) > 5
    assert [single for single, _ in found] == [fitted for _, fitted in found]


def test_of_what_no_market_shows_it_is_the_same_or_left_to_the_other() -> None:
    """Delays beyond the window, values of all and of none, counts from one to millions."""
    rng, answered = np.random.default_rng(11), 0
    for _ in range(150):
        window = int(rng.choice([1000, 60_000, WINDOW_MS]))
        ages = sorted(rng.integers(2 * window, size=rng.integers(6)) / 2, reverse=True)
        most = int(rng.choice([1, 100, 10**7]))
        counts = rng.integers(0, most + 1, size=len(ages) + 1).tolist()
        converted = int(rng.choice([1, 3, 100, 100_000]))
        buckets = list(zip([*map(float, ages), float(window)], counts, strict=True))
        delay_sum = int(rng.integers(converted * window + 1))
        single, fitted = both(converted, delay_sum, buckets, window * float(rng.uniform(0.01, 1)))
        answered += single is not None
        assert single in (None, fitted)

    assert answered > 100


def test_it_answers_where_all_that_was_bought_has_converted() -> None:
    """Then nothing is waited for, and the delays alone say how long they take."""
    single, fitted = both(10, 36_000_000, [(float(WINDOW_MS), 0)])

    assert single == fitted


def test_what_is_too_close_to_tell_is_left_to_the_other() -> None:
    """Sums of ages too long to be exact could round in another order."""
    single, fitted = both(5, 1000, [(float(WINDOW_MS), 10**8)])

    assert single is None
    assert fitted > 0.0
