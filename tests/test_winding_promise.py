"""Random histories of lessons and of taking them back: every way of folding gives equal bytes."""

from __future__ import annotations

import json
from typing import Any

import numpy
import pytest

from service.feedback import Report
from service.ledger.cancelling import PARTS, Cancelled
from service.store import learners, lessons, rebuilds
from service.teaching import FRESH, lesson
from service.winding import Retraction
from tests.builders import NAME, PRICE, Worker, working

pytestmark = pytest.mark.anyio

STEPS = 60
METHODS = [
    {"policy": {"method": "mean"}, "value": {"arrival": "once"}},
    {"policy": {"method": "mean"}, "value": {"arrival": "accrues", "window_ms": 20_000}},
    {"policy": {"method": "exptree-win-only"}, "value": {"arrival": "once"}},
    {"policy": {"method": "mean"}, "spend_on": "billed", "value": {"arrival": "accrues"}},
]


class History:
    """One line item and what is done to it, drawn from a seed."""

    def __init__(self, worker: Worker, seed: int) -> None:
        self.worker, self.chance = worker, numpy.random.default_rng(seed)
        self.bids: list[Any] = []
        self.wins: list[str] = []
        self.events: list[tuple[str, str]] = []

    async def step(self) -> None:
        """Do one thing, let a little time pass and teach now and then."""
        steps = [self.bid, self.bid, self.outcome, self.outcome, self.value, self.value]
        steps += [self.retract, self.rewind] if self.chance.random() < 0.4 else []
        await self.pick(steps)()
        self.worker.pass_service_ms(self.below(3000))
        if self.chance.random() < 0.3:
            await self.worker.learn()

    def pick(self, several: list[Any]) -> Any:
        """One of them."""
        return several[self.below(len(several))]

    def below(self, end: int) -> int:
        """A whole number below `end`."""
        return int(self.chance.integers(end))

    async def bid(self) -> None:
        """Ask for a price of one of two sources."""
        answer = await self.worker.bid(source=self.pick(["north", "south"]))
        if answer.ticket is not None:
            self.bids.append(answer)

    async def outcome(self) -> None:
        """Settle a bid, perhaps one that is settled already, perhaps in contradiction."""
        if not self.bids:
            return
        bid = self.pick(self.bids)
        kind = self.pick(["won", "won", "lost", "void"])
        price = PRICE // 2 if kind == "won" else None
        (receipt,) = await self.worker.report(Report(kind, bid.ticket, clearing=price))
        if kind == "won" and receipt.status == "recorded":
            self.wins.append(str(bid.ref))
        if self.chance.random() < 0.5 and kind == "won":
            await self.worker.report(Report("billed", bid.ticket, clearing=price))

    async def value(self) -> None:
        """Report a value, or correct one."""
        if not self.wins:
            return
        corrected = bool(self.events) and self.chance.random() < 0.4
        corrects = self.pick(self.events) if corrected else None
        ref = corrects[0] if corrects else self.pick(self.wins)
        event = f"e{len(self.events)}"
        amount = self.below(100_000_000)
        report = Report(
            "value", ref=ref, value=amount, event_id=event, corrects=corrects and corrects[1]
        )
        (receipt,) = await self.worker.report(report)
        if receipt.status == "recorded":
            self.events.append((ref, event))

    async def retract(self) -> None:
        """Take back a bid, an event or a source, in whole or in part."""
        part = self.pick(["value", "market", "both"])
        wishes = [Retraction(part, source="north")] if self.chance.random() < 0.2 else []
        wishes += [Retraction(part, refs=(str(bid.ref),)) for bid in self.bids[-5:]]
        wishes += [Retraction(part, event_ids=(event,)) for _, event in self.events[-5:]]
        if wishes:
            wish = self.pick(wishes)
            await self.worker.operator.winding.retract(NAME, wish, "a try", "tester")

    async def rewind(self) -> None:
        """Back by a few entries, perhaps over a reset."""
        if self.chance.random() < 0.3:
            await self.worker.operator.reset(NAME, "a try", "tester")
        to = max(0, self.worker.balance()["seq"] - self.below(12))
        await self.worker.operator.winding.rewind(NAME, to, "a try", "tester")


def agree(worker: Worker) -> None:
    """What is published is the fold from zero, from each checkpoint, and of the untouched rest."""
    read = worker.database.read
    rebuilt = read(lambda c: rebuilds.rebuild(c, NAME, None, FRESH, lesson))
    assert rebuilt.differences == ()
    snapshot = read(lambda c: learners.snapshots(c, [NAME]))[NAME]
    assert not snapshot.halted
    for seq in worker.column("SELECT seq FROM checkpoint"):
        before = rebuilt_to(worker, seq)
        assert (before.differences, before.checkpoint) == ((), seq)
    # The projection of what is cancelled is what the stream itself says.
    told = read(lambda c: lessons.cancellations(c, NAME))
    said = cancelled_by_stream(worker)
    seqs = worker.column("SELECT seq FROM stream")
    kinds = dict(zip(seqs, worker.column("SELECT kind FROM stream"), strict=True))
    assert {n: told.parts(n) for n in seqs if kinds[n] in PARTS} == {
        n: said.parts(n) for n in seqs if kinds[n] in PARTS
    }


def rebuilt_to(worker: Worker, seq: int) -> rebuilds.Rebuilt:
    """The learner as it was at a seq, folded twice."""
    return worker.database.read(lambda c: rebuilds.rebuild(c, NAME, seq, FRESH, lesson))


def cancelled_by_stream(worker: Worker) -> Cancelled:
    """The cancellations as the entries tell them."""
    spans = []
    for body in worker.column("SELECT body FROM stream WHERE kind IN ('retract', 'rewind')"):
        told = json.loads(body)
        spans += [(first, last, told["part"]) for first, last in told["cancels"]]
    return Cancelled(spans)


@pytest.mark.parametrize("changes", METHODS, ids=["once", "accrues", "tree", "billed"])
@pytest.mark.parametrize("seed", [1, 2, 3])
async def test_every_way_of_folding_gives_the_same_bytes(
    migrated_url: str, seed: int, changes: dict[str, Any]
) -> None:
    """Whatever came, was corrected, taken back or wound back; and money holds its promises."""
    async with working(migrated_url) as worker:
        await worker.create(**changes)
        history = History(worker, seed)
        for _ in range(STEPS):
            await history.step()
        worker.pass_service_ms(2000)
        await worker.learn()
        agree(worker)
        assert worker.audit() == []
        assert worker.column("SELECT seq FROM quarantine") == []
        kinds = worker.column("SELECT kind FROM stream")
        assert kinds.count("value") >= 3
        assert kinds.count("retract") + kinds.count("rewind") >= 2
