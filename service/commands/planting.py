"""Line items and tickets of a running server, made for whatever bench asks for them."""

from __future__ import annotations

import json
from collections.abc import Callable, Coroutine, Iterable, Mapping
from functools import partial
from typing import Any

from service.commands import bodies
from service.commands.load import Load, Seen, post
from service.commands.server_process import HOST, ServerFailed, ServerProcess

CONNECTIONS = 16


async def create(server: ServerProcess, configs: Iterable[Mapping[str, Any]]) -> Seen:
    """
    Make line items, one call each, several calls in flight.

    Raises:
        ServerFailed: One was refused.
    """
    calls = [post("/v1/line-items", json.dumps(one).encode(), server.key) for one in configs]
    seen = await loaded(server, lambda load: load.closed_loop(calls))
    if seen.statuses["201"] != len(calls):
        raise ServerFailed(f"Line items were refused: {dict(seen.statuses)}")
    return seen


async def tickets(server: ServerProcess, name: str, count: int) -> list[str]:
    """So many tickets of bids that left."""
    found = list[str]()
    # A batch may hold passes, so it is asked on until there are enough.
    while len(found) < count:
        batches = max(1, (count - len(found)) // bodies.BATCH_ROWS)
        calls = [bodies.batch(server.key, name)] * batches
        seen = await loaded(server, partial(Load.closed_loop, requests=calls), 4, keep=True)
        found += bodies.tickets_of(seen.bodies)
    return found[:count]


async def loaded(
    server: ServerProcess,
    play: Callable[[Load], Coroutine[Any, Any, Seen]],
    connections: int = CONNECTIONS,
    *,
    keep: bool = False,
) -> Seen:
    """Let a load play over connections of its own."""
    load = Load(HOST, server.port, bodies.PASSED, keep=keep)
    await load.connect(connections)
    try:
        return await play(load)
    finally:
        await load.close()
