"""The money side of bidding: keeps slices in the worker's hand and gives back what is left."""

from __future__ import annotations

import asyncio
import contextlib
import logging
import secrets
import time
from collections.abc import Callable
from datetime import date

from service import spans
from service.errors import BrokenPromise, StoreAway
from service.guard.hand import Given, Hand, SliceInHand
from service.metrics.tally import Tally
from service.money import NANOS_MAX
from service.store import leases
from service.store.database import Database
from service.threads import Threads

logger = logging.getLogger(__name__)

MARGIN_SHARE = 20  # A twentieth of the lease is left unused, against clocks that run unevenly.
# Service time moves in steps: at the moment of a lease it may be a step behind, and the lease
# then ends that much earlier for the database than a worker that counts on its own clock thinks.
STEP_S = 2.0
# A line item without money must not ask the database again with every opportunity.
DENIED_S = 0.25
OVERDUE_S = 0.25  # A batch takes a few milliseconds; one this late hangs.
BATCH_MAX = 200
# While nobody waits: a commit costs as much as the leases of many line items.
GATHER_S = 0.05
# Of all slices at once, thousands would keep every other writer waiting for a quarter second.
TOLD_MAX = 100


def boot_clock() -> float:
    """Seconds since boot, suspends included: the only clock a slice's time is measured on."""
    return time.clock_gettime(time.CLOCK_BOOTTIME)


class Leasing:
    """
    One worker's hand and the one task that fills it.

    Args:
        worker: This worker's id.
        lease_s: Seconds a slice is leased for.
        clock: The boot-time clock; tests hand in their own.
        gather_s: How long what nobody waits for yet may wait for more of its kind.
    """

    def __init__(
        self,
        database: Database,
        threads: Threads,
        worker: str,
        lease_s: int,
        clock: Callable[[], float] = boot_clock,
        tally: Tally | None = None,
        gather_s: float = GATHER_S,
    ) -> None:
        self._tally = tally or Tally()
        self._gather_s = gather_s
        self.hand = Hand()
        self._overdue_at = float("inf")
        self.clock = clock
        self._database, self._threads = database, threads
        self._worker, self._lease_s = worker, lease_s
        self._wanted: dict[str, asyncio.Future[None]] = {}
        self._wake, self._urgent = asyncio.Event(), asyncio.Event()
        self._denied: dict[str, tuple[str, float]] = {}
        self._before: dict[str, int] = {}
        self._turn = 0

    def denied(self, line_item: str) -> str | None:
        """Why the last wish of a moment ago found no money, or None."""
        reason, until = self._denied.get(line_item, ("", 0.0))
        return reason if self.clock() < until else None

    def wish(self, line_item: str) -> asyncio.Future[None]:
        """Ask for a slice in the next batch; several who ask share one answer."""
        if line_item not in self._wanted:
            self._wanted[line_item] = asyncio.get_running_loop().create_future()
            self._wake.set()
        return self._wanted[line_item]

    async def obtain(self, line_item: str, wait_s: float) -> None:
        """Wait at most `wait_s` seconds for a slice; the caller looks into the hand after."""
        wish = self.wish(line_item)
        self._urgent.set()
        # Nobody waits behind a database that hangs, or all who ask would pile up here.
        if time.monotonic() < self._overdue_at:
            # `wait` and not `wait_for`, which would cancel the wish that others wait for too.
            await asyncio.wait([wish], timeout=max(0.0, wait_s))

    def refresh(self, held: SliceInHand) -> None:
        """Ask for the next slice once half of this one, in money or in time, is used."""
        half_time = (held.leased_at + held.expires_at) / 2
        if held.free * 2 <= held.amount or self.clock() >= half_time:
            if self.denied(held.line_item) is None:
                self.wish(held.line_item)

    def forget(self, line_item: str) -> None:
        """Drop what was denied, since the line item has changed."""
        self._denied.pop(line_item, None)

    async def run(self) -> None:
        """Lease what is wished for, batch by batch, until cancelled."""
        while True:
            await self._wake.wait()
            with contextlib.suppress(TimeoutError):
                async with asyncio.timeout(self._gather_s):
                    await self._urgent.wait()
            self._wake.clear()
            self._urgent.clear()
            names = list(self._wanted)[:BATCH_MAX]
            await self._lease(names)
            for name in names:
                # Taken off only now: whoever asks while a lease is under way shares its answer.
                self._wanted.pop(name).set_result(None)
            if self._wanted:
                self._wake.set()

    async def give_back(self) -> None:
        """Tell the database what retired slices never issued; what fails is told again."""
        for _ in range(0, len(self.hand.given), TOLD_MAX):
            # Taken out before the await: what is retired meanwhile goes behind the rest.
            given = self.hand.given[:TOLD_MAX]
            del self.hand.given[:TOLD_MAX]
            try:
                await self._give_back(given)
            except asyncio.CancelledError:
                # We are stopping; the last call that gives back must still find them.
                self.hand.given = given + self.hand.given
                raise
            except StoreAway:
                # Perhaps it was freed: retiring again then touches no row.
                self.hand.given = given + self.hand.given
                return

    async def _give_back(self, given: list[Given]) -> None:
        try:
            await self._threads.run(leases.retire, self._database, [_report(g) for g in given])
            self._tally.add("slices_given_back", count=len(given))
        except BrokenPromise:
            # One broken row must not keep the money of all the others.
            for one in given:
                await self._give_back_alone(one)

    async def tick(self, parts: int = 1) -> None:
        """
        Report what was priced since the last tick, so that silence counts as rounds too.

        Args:
            parts: Only of the line items whose turn it is, when each has one in so many turns.
        """
        self._turn = (self._turn + 1) % parts
        slices = [s for s in self.hand.slices.values() if hash(s.line_item) % parts == self._turn]
        mine = [name for name in self.hand.under_floor if hash(name) % parts == self._turn]
        passes = {name: self.hand.under_floor.pop(name) for name in mine}
        reports = [
            leases.Report(s.line_item, s.id, s.bids, passes.pop(s.line_item, 0)) for s in slices
        ]
        # Passes without a slice in the hand are told under an id that no slice has.
        reports += [leases.Report(name, bytes(16), 0, count) for name, count in passes.items()]
        for at in range(0, len(reports), TOLD_MAX):
            try:
                await self._threads.run(leases.tick, self._database, reports[at : at + TOLD_MAX])
            except StoreAway:
                for report in reports[at:]:
                    self._pass_again(report)
                return

    async def _give_back_alone(self, one: Given) -> None:
        try:
            await self._threads.run(leases.retire, self._database, [_report(one)])
        except StoreAway:
            self.hand.given.append(one)
        except BrokenPromise:
            # Its money stays held, which is the safe side, until somebody has mended the row.
            logger.exception("a slice of line item %s could not be given back", one.line_item)

    def _pass_again(self, report: leases.Report) -> None:
        before = self.hand.under_floor.get(report.line_item, 0)
        if report.under_floor:
            self.hand.under_floor[report.line_item] = before + report.under_floor

    async def _lease(self, names: list[str]) -> None:
        asked_at, self._overdue_at = self.clock(), time.monotonic() + OVERDUE_S
        # The lease is measured from before we asked, so that ours always ends first.
        requests = [self._request(name, asked_at) for name in names]
        try:
            with spans.span("lease") as span:
                spans.note(span, line_items=len(names))
                answers = await self._threads.run(
                    leases.lease, self._database, self._worker, requests, self._lease_s
                )
        except asyncio.CancelledError:
            self._give_back_unseen(requests)
            raise
        except StoreAway:
            self._give_back_unseen(requests)
            answers = [leases.Denied(name, "budget_held") for name in names]
        finally:
            self._overdue_at = float("inf")
        for answer in answers:
            self._take(answer, asked_at)

    def _give_back_unseen(self, requests: list[leases.LeaseRequest]) -> None:
        """Perhaps slices were leased and the answer was lost: nothing was bid from them."""
        self.hand.given += [Given(r.slice_id, r.line_item, 0, 0) for r in requests]

    def _request(self, name: str, now: float) -> leases.LeaseRequest:
        before = self._before.get(name, 0)
        held = self.hand.slices.get(name)
        forecast = NANOS_MAX
        if held is not None:
            # Two refreshes from now is two thirds of a lease away.
            pace = held.issued / max(now - held.leased_at, 0.001)
            forecast = int(pace * self._lease_s * 2 / 3)
        return leases.LeaseRequest(name, secrets.token_bytes(16), forecast, before)

    def _take(self, answer: leases.Leased | leases.Denied, asked_at: float) -> None:
        denied = isinstance(answer, leases.Denied)
        self._tally.add("leases", "denied" if denied else "leased")
        if isinstance(answer, leases.Denied):
            self._denied[answer.line_item] = (answer.reason, self.clock() + DENIED_S)
            return
        held = self.hand.slices.get(answer.line_item)
        if held is not None and answer.tail and held.free >= answer.amount:
            # At the tail of a budget the rest in the hand is worth more than the new slice.
            self.hand.given.append(Given(answer.slice_id, answer.line_item, 0, 0))
            self._denied[answer.line_item] = ("budget_held", self.clock() + DENIED_S)
            return
        lease_s = answer.lease_ms / 1000
        self._before[answer.line_item] = answer.amount
        self._denied.pop(answer.line_item, None)
        self.hand.receive(
            SliceInHand(
                answer.slice_id,
                answer.line_item,
                answer.amount,
                date.fromisoformat(answer.day).toordinal(),
                asked_at,
                asked_at + lease_s - _margin_s(lease_s),
            )
        )


def _margin_s(lease_s: float) -> float:
    """What of a lease is left unused; of a very short one no more than half for the step."""
    return lease_s / MARGIN_SHARE + min(STEP_S, lease_s / 2.0)


def _report(given: Given) -> leases.Report:
    return leases.Report(given.line_item, given.id, given.bids, given.under_floor, given.issued)
