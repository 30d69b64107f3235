"""Jobs of a rehearsal spread over processes, apart from what any of them plays."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from multiprocessing import get_context
from typing import TypeVar

Job = TypeVar("Job")
Result = TypeVar("Result")


def spread(
    work: Callable[[Job], Result], jobs: Sequence[Job], processes: int
) -> Iterator[tuple[Job, Result]]:
    """
    Each job with its result, as they come; started in the order given.

    Args:
        work: A function of a module, so that another process finds it.
        jobs: Picklable.
        processes: How many work at once; no more are started than there are jobs.
    """
    # A fork would take along whatever threads and locks the caller has.
    fresh = get_context("spawn")
    with ProcessPoolExecutor(max(1, min(processes, len(jobs))), mp_context=fresh) as pool:
        waiting = {pool.submit(work, job): job for job in jobs}
        for done in as_completed(waiting):
            yield waiting[done], done.result()
