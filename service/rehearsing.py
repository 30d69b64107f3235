"""The story of rehearsals: asked for, played in processes of their own, kept, shown, cancelled.

Never on the event loop and never in the process that bids: so many processes at once, nice, each
killed when its rehearsal is cancelled or its worker stops.
"""

from __future__ import annotations

import json
import logging
import os
import subprocess
import sys
import threading
import time
from collections.abc import Collection, Mapping
from concurrent.futures import ThreadPoolExecutor
from contextlib import suppress
from dataclasses import dataclass
from functools import partial
from typing import Any

from service.errors import Conflict, StoreAway
from service.learner.rules import ACCRUES
from service.ordering import Orders, repeat_of
from service.rehearsal.rehearse import auctions_of
from service.rehearsal_orders import CURVE_ASSUMED, order_of, own_law
from service.store import past_decisions, reading, rehearsals
from service.store.database import Database, Reading, Writing
from service.store.line_items import one as line_item_row

logger = logging.getLogger(__name__)

SAY_S = 0.5  # Between two looks at whether somebody has cancelled, and two notes of progress.
DECISIONS_MAX = 200_000  # Of a line item's own log: the newest.
TAIL_CHARACTERS = 2000
# A library that spreads over all cores would take those of the bids.
ONE_THREAD = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")


@dataclass(frozen=True, slots=True)
class Stalls:
    """How many rehearsals one worker plays at once, and how many more may wait."""

    processes: int = 1
    waiting_max: int = 8


class Rehearsals:
    """Rehearsals of one worker; any worker shows and cancels those of all."""

    def __init__(self, orders: Orders, worker: str, stalls: Stalls) -> None:
        self._orders, self._worker, self._stalls = orders, worker, stalls
        self._pool = ThreadPoolExecutor(stalls.processes, thread_name_prefix="rehearsal")
        self._children = dict[int, subprocess.Popen[str]]()
        self._lock, self._closed = threading.Lock(), False

    async def ask(
        self, wish: Mapping[str, Any], actor: str, idempotency: str | None = None
    ) -> dict[str, Any]:
        """
        Put a rehearsal in the queue.

        Args:
            wish: From the form.

        Raises:
            NotFound: There is no such line item.
            Malformed: A policy that cannot work, or a market that does not fit.
            Conflict: Too many wait already.
        """
        begun = list[tuple[int, Mapping[str, Any]]]()
        order = await self._orders.read(lambda connection: order_from(connection, wish))

        def give(connection: Writing) -> dict[str, Any]:
            # A transaction that is tried again must not begin its rehearsal twice.
            begun.clear()
            most = self._stalls.processes + self._stalls.waiting_max
            if rehearsals.open_of(connection, self._worker) >= most:
                raise Conflict(
                    "rehearsals_waiting",
                    f"{most} rehearsals wait or play already; cancel one or ask again later.",
                )
            now_ms, name = self._orders.database.wall_ms(), wish["line_item"] or ""
            number = rehearsals.create(
                connection,
                name=wish["name"],
                actor=actor,
                line_item=name,
                worker=self._worker,
                total=_auctions(order),
                asked=wish,
                wall_ms=now_ms,
            )
            self._orders.note(connection, actor, "rehearse", name, "", {"rehearsal": number})
            begun.append((number, order))
            return show(rehearsals.one(connection, number), now_ms)

        answer = await self._orders.give(
            give, repeat_of(actor, idempotency, {"call": "rehearse", "wish": dict(wish)})
        )
        # Only after the commit, or a thread would look for a row that is not there yet.
        for number, found in begun:
            self._pool.submit(self._play, number, found)
        return answer

    async def one(self, number: int) -> dict[str, Any]:
        """
        One rehearsal with what it came to.

        Raises:
            NotFound: There is none.
        """
        row = await self._orders.read(lambda connection: rehearsals.one(connection, number))
        return show(row, self._orders.database.wall_ms())

    async def page(
        self, before: int | None, limit: int, only: Collection[str] | None = None
    ) -> list[dict[str, Any]]:
        """The newest rehearsals before a number, without their results; of `only` these."""
        rows = await self._orders.read(lambda c: rehearsals.page(c, before, limit, only))
        now_ms = self._orders.database.wall_ms()
        return [show(row, now_ms) for row in rows]

    async def cancel(self, number: int, reason: str, actor: str) -> dict[str, Any]:
        """
        Stop one, whoever plays it.

        Raises:
            NotFound: There is none.
        """

        def give(connection: Writing) -> dict[str, Any]:
            now_ms = self._orders.database.wall_ms()
            row = rehearsals.stop(connection, number, now_ms)
            detail = {"rehearsal": number}
            self._orders.note(connection, actor, "cancel", row["line_item"], reason, detail)
            return show(row, now_ms)

        answer = await self._orders.give(give, None)
        self._kill(number)
        return answer

    def close(self) -> None:
        """Kill what plays; what waits never begins. Both are lost, and shown so."""
        with self._lock:
            self._closed = True
            numbers = list(self._children)
        for number in numbers:
            self._kill(number)
        self._pool.shutdown(cancel_futures=True)

    def _kill(self, number: int) -> None:
        with self._lock:
            child = self._children.get(number)
            if child is not None:
                child.kill()

    def _play(self, number: int, order: Mapping[str, Any]) -> None:
        """Play one rehearsal in a process and write down how it goes; on a thread of its own."""
        database = self._orders.database
        try:
            if database.write(lambda c: rehearsals.start(c, number, database.wall_ms())):
                self._played(number, order, database)
        except StoreAway:
            # Nobody can be told now; it is shown as lost once this worker is gone.
            logger.warning("the database is away; rehearsal %d is given up", number)
            self._kill(number)
        except Exception:
            logger.exception("rehearsal %d failed", number)
            self._kill(number)
            raise

    def _played(self, number: int, order: Mapping[str, Any], database: Database) -> None:
        child = self._start(number)
        if child is None:
            return
        cancelled, result, error = False, None, ""
        handing = threading.Thread(target=_hand_over, args=(child, order), daemon=True)
        # Leaving the block closes the pipes and waits for its end.
        with child:
            try:
                handing.start()
                result, cancelled = self._listen(child, number, database)
                error = _tail(child)
            finally:
                with self._lock:
                    self._children.pop(number, None)
                child.kill()
                handing.join()
        # Another worker may have stopped it, which only the database knows.
        row = database.read(lambda c: rehearsals.one(c, number))
        if self._closed:
            state, why = "lost", "the worker that played it has stopped"
        elif result is not None:
            state, why = "done", None
        elif cancelled or row["state"] == "cancelled" or row["stopping"]:
            state, why = "cancelled", None
        else:
            state, why = "failed", f"its process ended with {child.returncode}: {error}"
        now_ms = database.wall_ms()
        database.write(lambda c: rehearsals.end(c, number, state, now_ms, result, why))

    def _start(self, number: int) -> subprocess.Popen[str] | None:
        pipe = subprocess.PIPE
        with self._lock:
            if self._closed:
                return None
            # Started anew and never forked, so that no connection to the database is shared.
            child = subprocess.Popen(
                [sys.executable, "-m", "service.rehearsal.child"],
                stdin=pipe,
                stdout=pipe,
                stderr=pipe,
                text=True,
                env={**os.environ, **ONE_THREAD},
            )
            self._children[number] = child
        return child

    def _listen(
        self, child: subprocess.Popen[str], number: int, database: Database
    ) -> tuple[dict[str, Any] | None, bool]:
        """Read its lines to the end; returns its result, and whether it was told to stop."""
        result, done, noted_at = None, 0, time.monotonic()
        for line in child.stdout or ():
            said = json.loads(line)
            result, done = said.get("result", result), said.get("done", done)
            if time.monotonic() - noted_at >= SAY_S and result is None:
                noted_at = time.monotonic()
                if not database.write(partial(rehearsals.advance, number=number, done=done)):
                    child.kill()
                    return None, True
        return result, False


def show(row: Mapping[str, Any], now_ms: int) -> dict[str, Any]:
    """A rehearsal as people see it: progress from 0 to 1, and an estimate of the time left."""
    share = row["done"] / row["total"] if row["total"] else 0.0
    left = None
    if row["state"] == "running" and row["done"]:
        passed_s = (now_ms - row["started_ms"]) / 1000
        left = round(passed_s * (1.0 - share) / share, 1)
    times = {name: row[name] for name in ("created_ms", "started_ms", "ended_ms")}
    shown = {
        "id": str(row["number"]),
        **{name: row[name] for name in ("name", "actor", "state", "error")},
        "line_item": row["line_item"] or None,
        "progress": round(share, 4),
        "seconds_left": left,
        "auctions_to_play": row["total"],
        **times,
    }
    return {**shown, "result": row["result"]} if "result" in row else shown


def _auctions(order: Mapping[str, Any]) -> int:
    log = order.get("log")
    return auctions_of(order) if log is None else len(log)


def order_from(connection: Reading, wish: Mapping[str, Any]) -> dict[str, Any]:
    """
    The order for a wish, with what only the database knows.

    Raises:
        NotFound: There is no such line item.
        Malformed: A policy that cannot work, or a market that does not fit.
        Conflict: The log is empty.
    """
    if wish["line_item"] is None:
        return dict(order_of(wish, wish["config"]))
    config, kind = line_item_row(connection, wish["line_item"]).config, wish["market"]["kind"]
    if kind == "own_curve":
        state = reading.facts(connection, wish["line_item"]).snapshot.state
        law = own_law(state, config, wish["market"]["auction"])
        return {**order_of(wish, config, law), "also_assumed": list(CURVE_ASSUMED)}
    order = dict(order_of(wish, config))
    if kind != "own_log":
        return order
    rows = past_decisions.past_decisions(
        *(connection, wish["line_item"], DECISIONS_MAX),
        accrues=config["value"]["arrival"] == ACCRUES,
    )
    if not rows:
        raise Conflict("nothing_logged", "The line item has made no decision that is still kept.")
    # A log of one decision lasts a moment, and a span of nothing could not be divided.
    span_ms = max(rows[-1]["at_ms"] - rows[0]["at_ms"] + 1, 1)
    market = {**order["market"], "span_ms": span_ms, "outcome_delay_ms": 1}
    return {**order, "market": market, "log": rows, "log_fees": config.get("fees")}


def _hand_over(child: subprocess.Popen[str], order: Mapping[str, Any]) -> None:
    """Write the order on a thread, since the pipe holds less than a long log."""
    if child.stdin is None:
        return
    try:
        child.stdin.write(json.dumps(order) + "\n")
        # Left open: when this end closes, the child ends.
        child.stdin.flush()
    except BrokenPipeError:
        logger.info("a rehearsal ended before it had read its order")
        # What it has not read is still held, and leaving the pipe open would try to write it again.
        with suppress(BrokenPipeError):
            child.stdin.close()


def _tail(child: subprocess.Popen[str]) -> str:
    said = child.stderr.read() if child.stderr is not None else ""
    # The last line of a traceback names the fault; the rest is for the log of its author.
    return said[-TAIL_CHARACTERS:].strip().rpartition("\n")[2]
