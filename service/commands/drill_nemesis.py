"""The faults of a drill, drawn from one seed: kills, stops, cut connections, database restarts."""

from __future__ import annotations

import asyncio
import contextlib
import os
import signal
import socket
import time
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from service.commands import pinning
from service.commands.postgresql_process import NoPostgreSQL, PostgreSQLProcess
from service.commands.server_process import HOST, ServerFailed, ServerProcess

KILL_GAP_S = (1.0, 3.0)
PAUSE_S = (0.5, 5.0)
DOWN_S = (0.3, 2.0)
SHARE_PAUSE = 0.25
SHARE_CUT = 0.25
START_AGAIN_S = 0.5
ORPHANS_S_MAX = 10.0
KILLS_PER_RESTART = 7  # One restart of the database among so many kills.


class Fleet:
    """
    The workers of one database, each on its own port, with one key for all.

    Args:
        directory: Where their logs lie.
        settings: Full names; the database among them.
    """

    def __init__(self, directory: Path, count: int, settings: dict[str, str]) -> None:
        self.servers: list[ServerProcess] = []
        self.serving: set[int] = set()
        for number in range(count):
            place = directory / f"worker-{number}"
            place.mkdir()
            self.servers.append(ServerProcess(place, settings))

    def start(self) -> None:
        """Start all; the first one makes the schema and the key."""
        for server in self.servers:
            server.key = self.servers[0].key
            self.start_one(server)

    def start_one(self, server: ServerProcess) -> None:
        """
        Start one that does not run.

        Raises:
            ServerFailed: It did not get ready.
        """
        server.start()
        self.serving.add(server.port)

    def kill_one(self, server: ServerProcess) -> None:
        """kill -9, and wait until nobody that it had started answers in its name."""
        self.serving.discard(server.port)
        server.stop(signal.SIGKILL)
        end = time.monotonic() + ORPHANS_S_MAX
        while listens(server.port) and time.monotonic() < end:
            time.sleep(0.02)

    def stop(self) -> None:
        """End all that run."""
        for server in self.servers:
            server.stop()

    def up(self) -> list[ServerProcess]:
        """Those that serve."""
        return [server for server in self.servers if server.port in self.serving]

    def fallen(self) -> list[ServerProcess]:
        """Workers that ended although nobody ended them."""
        return [s for s in self.up() if s.child is not None and s.child.poll() is not None]


@contextmanager
def running(fleet: Fleet) -> Iterator[Fleet]:
    """Start all of a fleet, and end whoever still runs after the block."""
    try:
        fleet.start()
        yield fleet
    finally:
        fleet.stop()


def listens(port: int) -> bool:
    """Whether somebody takes connections there."""
    with socket.socket() as probe:
        return probe.connect_ex((HOST, port)) == 0


@dataclass
class Nemesis:
    """
    Does harm until its count of kills is full and its time is over.

    Attributes:
        done: Faults by kind.
        back_s: When the database was back, after each restart.
        fallen: The logs of workers that ended by themselves.
    """

    fleet: Fleet
    postgresql: PostgreSQLProcess | None
    generator: np.random.Generator
    kills: int
    seconds: float
    advance: Callable[[], None]
    done: Counter[str] = field(default_factory=Counter)
    back_s: list[float] = field(default_factory=list)
    fallen: list[str] = field(default_factory=list)
    _tasks: list[asyncio.Task[None]] = field(default_factory=list)
    _paused: set[int] = field(default_factory=set)

    async def rage(self) -> None:
        """Do the harm, and leave everything running again."""
        end = time.monotonic() + self.seconds
        while self.done["kill"] < self.kills or time.monotonic() < end:
            await asyncio.sleep(self.generator.uniform(*KILL_GAP_S))
            await self._kill()
            await self._sometimes()
        await asyncio.gather(*self._tasks)

    async def _sometimes(self) -> None:
        if self.generator.random() < SHARE_PAUSE:
            self._begin_pause()
        if self.postgresql is not None and self.generator.random() < SHARE_CUT:
            await asyncio.to_thread(self.postgresql.cut_connections)
            self.done["cut"] += 1
        due = self.done["kill"] // KILLS_PER_RESTART + 1
        # The first comes early, so that the shortest drill has its three.
        if self.postgresql is not None and self.done["kill"] % KILLS_PER_RESTART == 3:
            if self.done["restart"] < due:
                await self._restart(self.postgresql)

    async def _kill(self) -> None:
        self.note_fallen()
        # One that is paused is left until it goes on: to be stopped is a fault of its own.
        ready = [s for s in self.fleet.up() if s.port not in self._paused]
        if not ready:
            return
        server = ready[int(self.generator.integers(len(ready)))]
        await asyncio.to_thread(self.fleet.kill_one, server)
        self.done["kill"] += 1
        self.advance()
        self._tasks.append(asyncio.create_task(self._revive(server)))

    async def _revive(self, server: ServerProcess) -> None:
        while True:
            try:
                await asyncio.to_thread(self.fleet.start_one, server)
            except ServerFailed:
                # It refuses to start while its database is away, and says so; the next one will.
                self.done["refused start"] += 1
                await asyncio.sleep(START_AGAIN_S)
            else:
                return

    def _begin_pause(self) -> None:
        ready = [s for s in self.fleet.up() if s.port not in self._paused]
        if ready:
            server = ready[int(self.generator.integers(len(ready)))]
            pause_s = self.generator.uniform(*PAUSE_S)
            self._tasks.append(asyncio.create_task(self._pause(server, pause_s)))

    async def _pause(self, server: ServerProcess, pause_s: float) -> None:
        child = server.child
        if child is None or child.poll() is not None:
            return
        self._paused.add(server.port)
        # All at once: who keeps the crew has nothing to do with prices, its children have.
        crew = [child.pid, *pinning.children(child.pid)]
        _signal(crew, signal.SIGSTOP)
        self.done["pause"] += 1
        await asyncio.sleep(pause_s)
        _signal(crew, signal.SIGCONT)
        self._paused.discard(server.port)

    async def _restart(self, postgresql: PostgreSQLProcess) -> None:
        # By turns and not by lot, so that the shortest drill has seen all three.
        ways: Sequence[str] = ("fast", "immediate", "kill -9")
        way = ways[self.done["restart"] % len(ways)]
        if way == "kill -9":
            postgresql.kill_postmaster()
        else:
            await asyncio.to_thread(postgresql.stop, way)
        await asyncio.sleep(self.generator.uniform(*DOWN_S))
        await _start_again(postgresql)
        self.done["restart"] += 1
        self.back_s.append(time.monotonic())

    def note_fallen(self) -> None:
        """Keep the logs of workers that ended by themselves, once for each."""
        for server in self.fleet.fallen():
            self.fallen.append(server.tail())
            self.fleet.kill_one(server)


async def _start_again(postgresql: PostgreSQLProcess) -> None:
    """After kill -9 its orphans hold the shared memory for a moment, and a start is refused."""
    for _ in range(20):
        try:
            await asyncio.to_thread(postgresql.start)
        except NoPostgreSQL:
            await asyncio.sleep(START_AGAIN_S)
        else:
            return
    raise NoPostgreSQL("PostgreSQL did not come back after it was killed.")


def _signal(processes: Sequence[int], what: signal.Signals) -> None:
    """Signal those that still live."""
    for one in processes:
        with contextlib.suppress(ProcessLookupError):
            os.kill(one, what)
