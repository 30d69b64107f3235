"""A story for people: what another cap, price, floor or method would have done on the log.

Pages of the log are read one by one, so that no connection is held for long; what they come to is
worked out in a process of its own once the log is long, one question at a time, so that bids
never wait for it.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context
from typing import Any

from service.decision.evidence import evidence
from service.decision.methods import METHODS
from service.errors import Malformed, Overloaded
from service.guard.fees import Fees
from service.learner.memory import Memory
from service.ordering import Orders
from service.rehearsal.alternatives import Alternative, Kind
from service.rehearsal.auction_log import NEVER, PASSED, WON, Logged
from service.rehearsal.hindsight_answer import Ask, answer, counted
from service.rehearsal.hindsight_assumed import Worth
from service.store import hindsights, reading
from service.store.database import Reading
from service.store.hindsights import Line, Span

ROWS_MAX = 100_000  # About a second of another process, and 100 MiB of its memory.
ROWS_HERE_MAX = 2_000  # A thread works so many out in the time that a process needs to start.
WAITING_MAX = 4
Seen = Callable[[int], None]
LEFT_OUT = (
    "test bids, and decisions that were never logged or are pruned by now; refunds lower no cost "
    "here"
)


@dataclass(frozen=True, slots=True)
class Question:
    """
    What is asked of a log; prices in nanos per impression with fees, times in wall clock ms.

    Args:
        kind: What differs.
        price: The flat price, cap or floor; 0 for another method.
        method: Name of the other method.
    """

    kind: Kind
    price: int = 0
    method: str | None = None
    from_ms: int | None = None
    until_ms: int | None = None


@dataclass(slots=True)
class _Log:
    """What was read of a log."""

    rows: list[Logged]
    notes: dict[str, int]
    tests: int = 0
    cut: bool = False


class Hindsights:
    """Answers questions of hindsight for one worker, one at a time."""

    def __init__(self, orders: Orders) -> None:
        self._orders = orders
        self._one, self._waiting = asyncio.Semaphore(1), 0

    async def look(
        self, line_item: str, question: Question, seen: Seen = lambda lines: None
    ) -> dict[str, Any]:
        """
        What the log tells of an alternative; money in nanos under names in `_nanos`.

        Args:
            line_item: Whose log.
            question: The alternative and the span.
            seen: Told how many lines are read, page by page.

        Raises:
            NotFound: No such line item.
            Malformed: The alternative makes no sense for this line item, or the span is empty.
            Overloaded: Too many ask already.
        """
        # Each that waits holds a connection of a client open: better a clear no.
        if self._waiting >= WAITING_MAX:
            raise Overloaded("too many questions of hindsight wait already")
        self._waiting += 1
        try:
            async with self._one:
                return await self._look(line_item, question, seen)
        finally:
            self._waiting -= 1

    async def evidence(self, line_item: str) -> dict[str, Any]:
        """
        Which methods fit a line item's feedback and market, and what each may cost to learn.

        Raises:
            NotFound: No such line item.
        """

        def read(connection: Reading) -> dict[str, Any]:
            facts = reading.facts(connection, line_item)
            told = hindsights.recent_outcomes(connection, line_item)
            return evidence(facts.row.config, facts.snapshot.state, told)

        found: dict[str, Any] = await self._orders.read(read)
        return {"line_item": line_item, **found}

    async def _look(self, line_item: str, question: Question, seen: Seen) -> dict[str, Any]:
        facts = await self._orders.read(lambda connection: reading.facts(connection, line_item))
        config = facts.row.config
        span = _span(question, facts.row.created_ms, self._orders.database.wall_ms())
        _check(question, config)

        def start(connection: Reading) -> tuple[int, int]:
            first = hindsights.first_number(connection, span.from_ms)
            return first, hindsights.spent_before(connection, line_item, span.from_ms)

        after, spent = await self._orders.read(start)
        log = await self._read(config, span, after, seen, _closes_until(facts))
        worth = Worth(
            config["value"]["ceiling"],
            config["bid_cap"],
            config["value"]["typical"],
            config.get("losses", "bare") == "priced",
        )
        # Of the money there was at the start of the span, what was spent before it is gone.
        left = max(0, facts.balance["target"] - spent)
        other = Alternative(question.kind, question.price, config["bid_cap"])
        ask = Ask(other, worth, left, config["daily_budget"])
        return {
            "line_item": line_item,
            "currency": config["currency"],
            "from_ms": span.from_ms,
            "until_ms": span.until_ms,
            "alternative": _named(question),
            "prices": "per impression, fees included; surplus is value less cost",
            "log": {**counted(log.rows), **log.notes, "test_bids": log.tests},
            "log_is_cut": log.cut,
            "left_out": LEFT_OUT,
            **await _worked_out(log.rows, ask),
        }

    async def _read(
        self,
        config: Mapping[str, Any],
        span: Span,
        after: int | None,
        seen: Seen,
        closes_until_ms: int,
    ) -> _Log:
        """The log of the span, a page at a time; cut at a limit."""
        log = _Log([], dict.fromkeys(hindsights.NOTES, 0))
        while after is not None and not log.cut:
            at = after

            def read(connection: Reading, at: int = at) -> tuple[list[Logged], hindsights.Page]:
                page = hindsights.page(connection, config, at, span)
                now_ms = min(page.service_ms, closes_until_ms)
                return [logged(line, config, now_ms) for line in page.lines], page

            rows, page = await self._orders.read(read)
            log.rows += rows
            log.tests += page.tests
            for line in page.lines:
                for note in line.said.notes:
                    log.notes[note] += 1
            after, log.cut = page.end, len(log.rows) >= ROWS_MAX
            seen(len(log.rows))
        return log


def logged(line: Line, config: Mapping[str, Any], service_ms: int) -> Logged:
    """One line of the log as hindsight reads it, at a moment of service time."""
    decision, said, fees = line.decision, line.said, Fees.of(config.get("fees"))
    passed = decision["price"] is None
    floor, held = decision["floor_held"], decision["held"]
    if floor is None:
        floor = fees.gross(decision["floor"]) if decision["floor"] else 0
    # Where no hold was kept with the decision, it is worked out from what was sent.
    if held is None and not passed:
        held = said.body.get("bid") or fees.gross(decision["price"])
    low, high = _worth(line, config, service_ms)
    return Logged(
        auction=said.body.get("auction") or decision["auction"] or config["auction"],
        bid=0 if passed else held,
        result=PASSED if passed else said.result,
        high=high,
        low=low,
        floor=max(0, floor),
        price=said.price if said.result == WON else 0,
        least=None if passed else said.body.get("to_win"),
        source=decision["source"],
        reason=decision["reason"] or "",
        set_by=decision["set_by"] or "",
        at_ms=decision["at_ms"],
        day=line.day,
        arm=decision["arm"],
        arm_odds=decision["arm_odds"],
        odds=decision["odds"],
    )


def _worth(line: Line, config: Mapping[str, Any], service_ms: int) -> tuple[int, int]:
    said, value = line.said, config["value"]
    ceiling = value["ceiling"]
    if said.result != WON or said.paid_ms is None:
        return 0, ceiling
    amount = min(max(0, said.amount), ceiling)
    if value["arrival"] == "once":
        return (amount, amount) if said.valued else (0, ceiling)
    # By service time, which stands still with the service, as the windows do.
    closed = service_ms - said.paid_ms > value["window_ms"]
    return amount, amount if closed else ceiling


def _closes_until(facts: reading.Facts) -> int:
    """The service time up to which windows close: they stand still while values are silent."""
    silence_ms = (facts.row.config.get("tripwires") or {}).get("value_silence_ms")
    if silence_ms is None:
        return NEVER
    return Memory.from_bytes(facts.snapshot.state).heard_ms + int(silence_ms)


def _span(question: Question, created_ms: int, now_ms: int) -> Span:
    from_ms = created_ms if question.from_ms is None else question.from_ms
    until_ms = now_ms + 1 if question.until_ms is None else question.until_ms
    if from_ms >= until_ms:
        raise Malformed("bad_field", "The span must begin before it ends.", {"field": "until_at"})
    return Span(from_ms, until_ms)


def _check(question: Question, config: Mapping[str, Any]) -> None:
    if question.kind == "flat" and question.price > config["bid_cap"]:
        raise Malformed("bad_field", "It lies above the bid cap.", {"field": "flat_price_cpm"})
    if question.kind == "cap" and METHODS[config["policy"]["method"]].by_law:
        raise Malformed(
            "cap_moves_the_law",
            "The line item draws its bids from a law that hangs on the cap: what it would have "
            "bid under another cap is not in the log.",
            {"field": "bid_cap_cpm"},
        )
    if question.method is not None and question.method not in METHODS:
        raise Malformed("bad_field", "There is no method of this name.", {"field": "method"})


def _named(question: Question) -> dict[str, Any]:
    said: dict[str, Any] = {"kind": question.kind}
    if question.kind == "method":
        return {**said, "method": question.method}
    return {**said, "price_cpm_nanos": question.price}


async def _worked_out(rows: list[Logged], ask: Ask) -> dict[str, object]:
    if len(rows) <= ROWS_HERE_MAX:
        return await asyncio.to_thread(answer, rows, ask)
    return await asyncio.to_thread(_elsewhere, rows, ask)


def _elsewhere(rows: list[Logged], ask: Ask) -> dict[str, object]:
    # Begun afresh, since a fork would take along the threads and locks of the server.
    with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as process:
        return process.submit(answer, rows, ask).result()
