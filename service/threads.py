"""The threads that talk to the database, so that the event loop never waits for SQL."""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import ParamSpec, TypeVar

P = ParamSpec("P")
T = TypeVar("T")


class Threads:
    """A bounded pool; one per worker process."""

    def __init__(self, count: int) -> None:
        self._pool = ThreadPoolExecutor(count, thread_name_prefix="store")

    async def run(self, work: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
        """
        Run blocking work in a thread and wait for it without blocking the loop.

        A caller that is cancelled leaves when the work is over: whatever it does next comes after.
        """
        # Wrapped, because an executor hands on no keyword arguments.
        loop = asyncio.get_running_loop()
        future = loop.run_in_executor(self._pool, lambda: work(*args, **kwargs))
        try:
            return await asyncio.shield(future)
        except asyncio.CancelledError:
            # Its result is nobody's any more, but its transaction must not outlive a stop.
            await asyncio.wait([future])
            raise

    def close(self) -> None:
        """Wait for what is running and let the threads go."""
        self._pool.shutdown()
