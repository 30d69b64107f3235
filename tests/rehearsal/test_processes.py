"""Jobs come back with their own results, from however many processes, and failures are not lost."""

from __future__ import annotations

import math
from operator import neg

import pytest

from service.rehearsal.processes import spread


@pytest.mark.parametrize("processes", [1, 2, 50])
def test_each_job_comes_with_its_result(processes: int) -> None:
    """Every job once, whatever the order they end in."""
    found = list(spread(neg, [3, 1, 2], processes))

    assert sorted(found) == [(1, -1), (2, -2), (3, -3)]


def test_a_job_that_fails_is_heard_of() -> None:
    """The error of the other process is raised here."""
    with pytest.raises(ValueError, match=r"math domain|nonnegative|expected"):
        list(spread(math.sqrt, [-1.0], 1))


def test_no_jobs_are_no_work() -> None:
    """Nothing is started for nothing."""
    assert list(spread(neg, [], 2)) == []
