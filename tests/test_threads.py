"""The threads that talk to the database: bounded, and the event loop never waits for them."""

from __future__ import annotations

import asyncio
import threading
from concurrent.futures import ThreadPoolExecutor

import pytest

from service.errors import Overloaded
from service.threads import Threads

pytestmark = pytest.mark.anyio


def divide(number: int, *, by: int) -> int:
    """Something that may fail."""
    return number // by


async def test_work_is_done_in_another_thread() -> None:
    """Arguments go in, the answer comes out, and errors come as they are."""
    threads = Threads(1)
    assert await threads.run(divide, 7, by=2) == 3
    assert (await threads.run(threading.current_thread)).name.startswith("store")
    with pytest.raises(ZeroDivisionError):
        await threads.run(divide, 7, by=0)
    assert await threads.run(divide, 8, by=2) == 4
    threads.close()


async def test_the_loop_goes_on_while_threads_work() -> None:
    """Something else runs between the start of slow work and its end."""
    threads, go = Threads(1), threading.Event()
    working = asyncio.create_task(threads.run(go.wait, 5))
    await asyncio.sleep(0.01)
    assert not working.done()
    go.set()
    assert await working is True
    threads.close()


async def test_no_more_run_at_once_than_there_are_threads() -> None:
    """What comes beyond waits its turn, so the database never sees more connections."""
    threads, lock = Threads(3), threading.Lock()
    together = threading.Barrier(3)
    now, most = 0, 0

    def work() -> None:
        nonlocal now, most
        with lock:
            now += 1
            most = max(most, now)
        together.wait(5)
        with lock:
            now -= 1

    await asyncio.gather(*(threads.run(work) for _ in range(9)))
    assert most == 3
    threads.close()


async def test_closing_waits_for_what_runs() -> None:
    """A write that has begun is not left behind half told, and nothing new begins."""
    threads, go, done = Threads(1), threading.Event(), threading.Event()

    def work() -> None:
        go.wait(5)
        done.set()

    running = asyncio.create_task(threads.run(work))
    await asyncio.sleep(0.01)
    with ThreadPoolExecutor(1) as pool:
        closing = pool.submit(threads.close)
        await asyncio.sleep(0.02)
        assert not closing.done()
        go.set()
    assert done.is_set()
    await running
    with pytest.raises(RuntimeError):
        await threads.run(work)


async def test_whoever_stops_waiting_does_not_stop_the_work() -> None:
    """A cancelled caller leaves the transaction to its end, so it is never cut in the middle."""
    threads, go, done = Threads(1), threading.Event(), threading.Event()

    def work() -> None:
        go.wait(5)
        done.set()

    asking = asyncio.create_task(threads.run(work))
    await asyncio.sleep(0.01)
    asking.cancel()
    with pytest.raises(asyncio.CancelledError):
        await asking
    go.set()
    await asyncio.to_thread(threads.close)
    assert done.is_set()


async def test_a_cancelled_caller_leaves_when_the_work_is_over() -> None:
    """A transaction never outlives the stop that cancelled who waited for it."""
    threads, go, over = Threads(1), threading.Event(), threading.Event()

    def work() -> None:
        go.wait(5)
        over.set()

    waiting = asyncio.create_task(threads.run(work))
    await asyncio.sleep(0.05)
    waiting.cancel()
    await asyncio.sleep(0.05)
    assert not waiting.done()
    go.set()
    with pytest.raises(asyncio.CancelledError):
        await waiting
    assert over.is_set()
    threads.close()


async def test_work_that_no_thread_began_in_time_is_never_done() -> None:
    """What was begun is waited for however long it takes, and its answer comes."""
    threads, go = Threads(1), threading.Event()
    busy = asyncio.create_task(threads.run_within(0.05, go.wait, 5))
    await asyncio.sleep(0.1)
    done = threading.Event()
    with pytest.raises(Overloaded):
        await threads.run_within(0.05, done.set)
    go.set()
    assert await busy is True
    assert await threads.run_within(5, divide, 8, by=2) == 4
    assert not done.is_set()
    threads.close()
