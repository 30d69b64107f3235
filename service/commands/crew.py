"""The crew of one host: workers that share a port, a clerk, and who restarts them.

The crew's own process opens no database and serves nothing, so hardly anything can end it.
"""

from __future__ import annotations

import errno
import logging
import os
import signal
import socket
import subprocess
import sys
import threading
import time
from dataclasses import dataclass, field

from service.app import new_worker
from service.metrics.board import Board

logger = logging.getLogger(__name__)

STOP_S = 8.0  # A stop is promised within ten seconds, for whoever stops us kills us after them.
LOOK_S = 0.05
BIND_S = 10.0
QUEUE = 2048  # Connections that may wait while every worker is busy or starting.
RESTART_S = 0.1
RESTART_S_MAX = 5.0
SOUND_S = 10.0  # A child that lived for so long was no part of a crash loop.


def delay_s(deaths: int) -> float:
    """Seconds until a child is started again after so many quick deaths in a row."""
    # Cut before the power, which would not fit a float after a thousand deaths.
    return min(RESTART_S_MAX, RESTART_S * float(2 ** min(deaths, 10)))


def listen(host: str, port: int) -> socket.socket:
    """
    The one listening socket of the crew.

    All workers accept from it, so that a connection waits for whichever worker is free and
    never for one that is stopped or dead.

    Raises:
        OSError: The port is taken by somebody else.
    """
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    until = time.monotonic() + BIND_S
    while True:
        try:
            return socket.create_server((host, port), family=family, backlog=QUEUE)
        except OSError as error:
            # The workers of a crew that was killed may still be putting down their slices.
            if error.errno != errno.EADDRINUSE or time.monotonic() > until:
                raise
        time.sleep(LOOK_S)


def listen_on(places: list[tuple[str, int]]) -> list[socket.socket]:
    """
    A socket for each address.

    Raises:
        OSError: A port is taken by somebody else.
    """
    return [listen(host, port) for host, port in places]


@dataclass(slots=True)
class Berth:
    """The place of one child: who is in it, and when the next one may come."""

    role: str
    place: int
    child: subprocess.Popen[bytes] | None = None
    worker: str = ""
    started_at: float = 0.0
    deaths: int = 0
    not_before: float = 0.0

    def died(self, now: float) -> None:
        """Note a death; whoever died young again and again is waited for longer."""
        self.deaths = 1 if now - self.started_at > SOUND_S else self.deaths + 1
        self.not_before = now + delay_s(self.deaths - 1)
        self.child = None


@dataclass(slots=True)
class Crew:
    """
    Children that are started again when they die, until a stop.

    Args:
        shared: The listening sockets, inherited by the workers.
        berths: One for each child.
        kept: Descriptors that stay open until the last child has gone.
    """

    shared: list[socket.socket]
    berths: list[Berth]
    kept: list[int] = field(default_factory=list)
    stopping: threading.Event = field(default_factory=threading.Event)
    board: int = -1

    def run(self) -> None:
        """Keep everybody at work until SIGTERM or SIGINT, then let them finish and leave."""
        for number in (signal.SIGTERM, signal.SIGINT):
            signal.signal(number, lambda *_: self.stopping.set())
        # Its other end is held by nobody else: children see it close when this process is gone.
        watched, held = os.pipe()
        # Made before the children and outliving each of them, so that no count begins again.
        self.board = Board.shared(len(self.berths))[1]
        try:
            while not self.stopping.is_set():
                for berth in self.berths:
                    self._look(berth, watched)
                self.stopping.wait(LOOK_S)
        finally:
            self._stop()
            os.close(held)
            os.close(watched)
            os.close(self.board)

    def _look(self, berth: Berth, watched: int) -> None:
        now = time.monotonic()
        if berth.child is not None and (code := berth.child.poll()) is not None:
            logger.error("%s %d ended with %d", berth.role, berth.child.pid, code)
            berth.died(now)
        if berth.child is None and now >= berth.not_before:
            self._start(berth, watched, now)

    def _start(self, berth: Berth, watched: int, now: float) -> None:
        words = ["--watched", str(watched), "--board", str(self.board)]
        words += ["--place", str(berth.place)]
        passed = [watched, self.board, *self.kept]
        if berth.role == "worker":
            # Who stood here before is dead for certain, so no freeze need wait for it.
            predecessor, berth.worker = berth.worker, new_worker()
            words += ["--worker", berth.worker]
            words += ["--predecessor", predecessor] if predecessor else []
            for listener in self.shared:
                words += ["--socket", str(listener.fileno())]
                passed.append(listener.fileno())
        # Started anew and never forked, so that no connection to the database is shared.
        berth.child = subprocess.Popen(  # noqa: S603 - Our own fixed command line.
            [sys.executable, "-m", "service.commands.child", berth.role, *words], pass_fds=passed
        )
        berth.started_at = now
        logger.info("%s %d starts", berth.role, berth.child.pid)

    def _stop(self) -> None:
        # Nobody who comes now is served by a worker that is about to leave.
        for listener in self.shared:
            listener.close()
        children = [berth.child for berth in self.berths if berth.child is not None]
        for child in children:
            child.send_signal(signal.SIGTERM)
        # One moment for all of them, or the waits for several slow ones would add up.
        until = time.monotonic() + STOP_S
        for child in children:
            try:
                child.wait(max(0.0, until - time.monotonic()))
            except subprocess.TimeoutExpired:
                # Its slices are silent from now on and come back after their grace.
                logger.error("%d does not stop and is killed", child.pid)
                child.kill()
                child.wait()
