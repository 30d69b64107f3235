"""Gauges of a worker: levels as they stand, totals by what they have grown, once a second."""

from __future__ import annotations

import asyncio
import time

import pytest

from service.metrics.series import OTHER
from service.metrics.tally import Tally
from service.sampling import once, sample

MEGABYTE = 2**20


def test_a_level_is_what_stands_now() -> None:
    """It falls as well as rises."""
    tally, waiting = Tally(), [5]
    for stands in (5, 2, 0):
        waiting[0] = stands
        once(tally, {"waiting_bids": lambda: waiting[0]}, {}, {})
        assert tally.value("waiting_bids") == stands


def test_a_total_is_counted_by_what_it_has_grown() -> None:
    """The row of a place in the crew goes on after a worker that was there before."""
    tally, dropped = Tally(), [3]
    tally.add("dropped_decisions", count=100)
    before = {"dropped_decisions": 0}
    for total, counted in ((3, 103), (3, 103), (10, 110)):
        dropped[0] = total
        before = once(tally, {}, {"dropped_decisions": lambda: dropped[0]}, before)
        assert tally.value("dropped_decisions") == counted
        assert before == {"dropped_decisions": total}


def test_the_memory_of_the_process_is_told_in_bytes() -> None:
    """An interpreter takes megabytes and no terabytes."""
    tally = Tally()
    once(tally, {}, {}, {})
    assert MEGABYTE < tally.value("memory_bytes") < 2**20 * MEGABYTE


def test_a_name_that_no_series_has_is_a_mistake() -> None:
    """It is told at once, not measured into nowhere."""
    with pytest.raises(KeyError):
        once(Tally(), {OTHER: lambda: 1}, {}, {})


@pytest.mark.anyio
async def test_samples_go_on_until_they_are_cancelled() -> None:
    """The first at once, with the moment at which the process began."""
    tally, looks = Tally(), list[int]()

    def read() -> int:
        looks.append(1)
        return 4

    task = asyncio.create_task(sample(tally, {"slices_in_hand": read}, {"dropped_decisions": read}))
    await asyncio.sleep(0)
    assert (tally.value("slices_in_hand"), tally.value("dropped_decisions")) == (4, 4)
    assert abs(tally.value("start_timestamp_seconds") / 1000 - time.time()) < 60
    task.cancel()
    with pytest.raises(asyncio.CancelledError):
        await task
    assert len(looks) == 2
