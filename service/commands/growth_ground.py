"""Where growth is measured: servers that are started when a section asks for them, and turns.

A server that stays small is asked by turns with one that has grown, so that both meet the same
noise of the machine.
"""

from __future__ import annotations

import argparse
import itertools
from collections.abc import Callable, Mapping, Sequence
from contextlib import ExitStack
from functools import partial
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from service.commands import bodies, figures, pinning, planting
from service.commands.figures import Figure
from service.commands.load import Load, Seen
from service.commands.postgresql_process import PostgreSQLProcess
from service.commands.server_process import ServerProcess

# An even load must never wait for a connection: so many bids are under way at a thousand a
# second if each of them waits for its whole deadline.
CONNECTIONS = 80
SCALAR, COVARIATE = "kl-ucbid", "linear"
FLAT_MAX = 1.2

Say = Callable[[str], None]
Side = tuple[ServerProcess, Sequence[bytes]]


class Ground:
    """
    The servers of one run.

    Args:
        folder: Where they keep what they write.
        database: Where they keep their databases; None for a SQLite file each.
    """

    def __init__(self, folder: Path, database: PostgreSQLProcess | None = None) -> None:
        self._folder, self._database = folder, database
        self._servers: dict[str, ServerProcess] = {}
        self._made: dict[str, set[str]] = {}
        self._stack = ExitStack()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._stack.close()

    async def server(
        self, name: str, configs: Sequence[Mapping[str, Any]] = ()
    ) -> tuple[ServerProcess, float]:
        """
        The server of this name with these line items; what is not there yet is made.

        Returns:
            The server, and the seconds that making the line items took.
        """
        server = self._servers.get(name) or self._started(name)
        made = self._made.setdefault(name, set())
        missing = [one for one in configs if one["id"] not in made]
        if not missing:
            return server, 0.0
        seconds = (await planting.create(server, missing)).seconds
        made.update(one["id"] for one in missing)
        return server, seconds

    def kept_bytes(self, name: str) -> int:
        """What the database of this server keeps on disk; on PostgreSQL, those of all of them."""
        if self._database:
            return self._database.kept_bytes
        return sum(one.stat().st_size for one in (self._folder / name).glob("bidkeel.sqlite*"))

    def _started(self, name: str) -> ServerProcess:
        place = self._folder / name
        place.mkdir()
        # A probe is to find its price however late, and a late one is what it is there to find.
        settings = {"BIDKEEL_DEADLINE_MS_MAX": str(bodies.PATIENT_MS)}
        if self._database:
            settings["BIDKEEL_DATABASE_URL"] = self._database.new_database(name)
        server = self._stack.enter_context(ServerProcess(place, settings))
        self._servers[name] = server
        return server


def line_items(count: int, method: str) -> list[dict[str, Any]]:
    """So many line items of one method."""
    return [bodies.line_item(name_of(number, method), method) for number in range(count)]


def name_of(number: int, method: str = SCALAR) -> str:
    """What the line item of this number is called."""
    return f"bench-{method}-{number}"


def asked(server: ServerProcess, names: Sequence[str]) -> Side:
    """A server and one bid on each of these line items."""
    return server, [bodies.bid(server.key, name, features=bodies.FEATURES) for name in names]


async def by_turns(sides: Sequence[Side], arguments: argparse.Namespace) -> list[list[Seen]]:
    """Bids at an even rate on each side by turns; each line item has leased a slice before."""
    each = max(1, arguments.bids // arguments.rounds)
    asking = [itertools.cycle(calls) for _, calls in sides]
    found = [list[Seen]() for _ in sides]
    for server, calls in sides:
        await planting.loaded(server, partial(Load.closed_loop, requests=calls))
    for _ in range(arguments.rounds):
        for place, (server, _) in enumerate(sides):
            calls = list(itertools.islice(asking[place], each))
            found[place].append(await even(server, calls, arguments.rate))
    return found


async def enclosed(small: Side, grown: Side, arguments: argparse.Namespace) -> list[list[Seen]]:
    """
    Bids at an even rate on the grown side without a break, on the small side before and after.

    By turns its line items would be asked half as often as the rate says, and each time have
    lent their slice back. The first stretch, in which slices are leased, does not count.
    """
    count = arguments.rounds
    each, found = max(1, arguments.bids // count), list[list[Seen]]()
    for (server, calls), rounds in ((small, count), (grown, 2 * count), (small, count)):
        asking, seen = itertools.cycle(calls), list[Seen]()
        for _ in range(rounds):
            seen.append(await even(server, list(itertools.islice(asking, each)), arguments.rate))
        found.append(seen)
    before, among, after = found
    return [[*before[1::2], *after[: count - count // 2]], among[count:]]


async def even(server: ServerProcess, calls: Sequence[bytes], rate: float) -> Seen:
    """These calls at an even rate."""
    return await planting.loaded(server, lambda load: load.open_loop(calls, rate), CONNECTIONS)


def flat(name: str, first: Sequence[Seen], last: Sequence[Seen]) -> list[Figure]:
    """How p50 has grown, round by round, and what it is."""
    halves = [[one.wait_ms(0.5) for one in rounds] for rounds in (first, last)]
    grown = [after / before for before, after in zip(*halves, strict=True)]
    return [
        figures.of_rounds(f"{name}, bid p50, after over before", "times", grown, FLAT_MAX),
        # The least is what the code costs; whatever is above it is the machine's.
        Figure(
            f"{name}, the same in the quietest rounds", min(halves[1]) / min(halves[0]), "times"
        ),
        figures.of_rounds(f"{name}, bid p50 before", "ms", halves[0]),
        figures.of_rounds(f"{name}, bid p50 after", "ms", halves[1]),
        Figure(f"{name}, bids that passed", sum(one.marked for one in [*first, *last]), ""),
    ]


def memory_kib(server: ServerProcess) -> float:
    """What its workers keep in memory."""
    pid = server.child.pid if server.child else 0
    return float(sum(pinning.memory_kib(one) for one in pinning.workers(pid)))
