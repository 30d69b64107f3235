"""The threads that talk to the database, so that the event loop never waits for SQL."""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from contextvars import copy_context
from typing import ParamSpec, TypeVar

from service.errors import Overloaded, StoreAway
from service.metrics.tally import Tally

P = ParamSpec("P")
T = TypeVar("T")


class Threads:
    """A bounded pool; one per worker process."""

    def __init__(self, count: int, tally: Tally | None = None) -> None:
        self._tally = tally or Tally()
        self._pool = ThreadPoolExecutor(count, thread_name_prefix="store")

    async def run(self, work: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
        """
        Run blocking work in a thread and wait for it without blocking the loop.

        A caller that is cancelled leaves when the work is over: whatever it does next comes after.
        """
        # Wrapped, because an executor hands on no keyword arguments; with the id of the request.
        loop, context = asyncio.get_running_loop(), copy_context()
        future = loop.run_in_executor(self._pool, lambda: context.run(work, *args, **kwargs))
        try:
            return await asyncio.shield(future)
        except asyncio.CancelledError:
            # Its result is nobody's any more, but its transaction must not outlive a stop.
            await asyncio.wait([future])
            raise
        except StoreAway:
            # Everything that asks the database comes through here, on the loop's own thread.
            self._tally.add("database_failures")
            raise

    async def run_within(
        self, seconds: float, work: Callable[P, T], *args: P.args, **kwargs: P.kwargs
    ) -> T:
        """
        As run(), but give up when no thread comes free in time.

        Raises:
            Overloaded: The work was not begun, and never will be.
        """
        context = copy_context()
        begun = self._pool.submit(lambda: context.run(work, *args, **kwargs))
        future = asyncio.wrap_future(begun)
        done, _ = await asyncio.wait([future], timeout=seconds)
        # What runs cannot be cancelled, so this is false once the work has begun.
        if not done and begun.cancel():
            raise Overloaded("no thread came free")
        try:
            return await future
        except StoreAway:
            self._tally.add("database_failures")
            raise

    def close(self) -> None:
        """Wait for what is running and let the threads go."""
        self._pool.shutdown()
