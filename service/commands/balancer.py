"""A load balancer for the drills: the next server takes what one that is leaving did not.

What it counts is what a caller behind such a balancer never notices: a connection refused, and
one that was closed before any answer. What was answered, whatever it said, is not tried again.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Awaitable, Callable, Mapping, Sequence

from service.commands.wire import Reply, Wire

REFUSED, CLOSED = "refused", "closed before an answer"


class Balancer:
    """
    Takes turns among the servers that are in.

    Args:
        wires: One per server; all of them in at first.
    """

    def __init__(self, wires: Sequence[Wire]) -> None:
        self._wires, self._next = list(wires), 0
        self._out: set[int] = set()
        self.moved: Counter[str] = Counter()

    async def get(self, path: str) -> Reply:
        """Ask whoever is next."""
        return await self._ask(lambda wire: wire.get(path))

    async def post(self, path: str, body: Mapping[str, object]) -> Reply:
        """Tell whoever is next."""
        return await self._ask(lambda wire: wire.post(path, body))

    def bring_in(self, place: int) -> None:
        """Send requests to a server again, as when its check of health succeeds."""
        self._out.discard(place)

    def take_out(self, place: int) -> None:
        """Send nothing more to a server."""
        self._out.add(place)

    async def _ask(self, ask: Callable[[Wire], Awaitable[Reply]]) -> Reply:
        tried = set[int]()
        while (place := self._pick(tried)) is not None:
            tried.add(place)
            try:
                return await ask(self._wires[place])
            except ConnectionRefusedError:
                self.moved[REFUSED] += 1
                # Nobody listens: like a failed check of health, until it is brought in again.
                self.take_out(place)
            except ConnectionError:
                self.moved[CLOSED] += 1
        raise ConnectionRefusedError("no server took the request")

    def _pick(self, tried: set[int]) -> int | None:
        for _ in self._wires:
            self._next = (self._next + 1) % len(self._wires)
            if self._next not in self._out and self._next not in tried:
                return self._next
        return None
