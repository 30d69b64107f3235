"""Features and hints through the real stories: priced, carried, learnt, refolded, and private."""

from __future__ import annotations

import json
from base64 import b64decode
from typing import Any

import pytest

from service.bidding import Answer
from service.decision.opportunity import Feature
from service.feedback import Report
from service.learner import hashing
from service.learner.hint_part import Book
from service.learner.linear_part import Sums
from service.learner.memory import Memory
from service.store import learners, rebuilds
from service.store.quarantines import booking_of, written
from service.teaching import FRESH, lesson
from service.winding import Retraction
from tests.builders import CAP, NAME, Worker, working

pytestmark = pytest.mark.anyio

LINEAR = {"method": "linear", "dimensions": 32}
ONE = {"ceiling": CAP, "typical": CAP // 2}
PHONE: dict[str, Feature] = {"device": "phone", "hour": 13}
DESK: dict[str, Feature] = {"device": "desk", "hour": 9}
HINT = 3_000_000
WINDOW_MS = 60_000


def memory(worker: Worker) -> Memory:
    """The published state."""
    snapshot = worker.database.read(lambda c: learners.snapshots(c, [NAME]))[NAME]
    again = worker.database.read(lambda c: rebuilds.fold_all(c, NAME, FRESH, lesson))
    assert again == snapshot.state
    return Memory.from_bytes(snapshot.state)


def hashed(worker: Worker, features: dict[str, Feature]) -> hashing.Hashed:
    """The features under the key of this database."""
    key = worker.one("SELECT value FROM fact WHERE name = 'feature_key'")
    return hashing.hashed(features, bytes.fromhex(key))


def bodies(worker: Worker, kind: str) -> list[dict[str, Any]]:
    """The bodies of every entry of a kind."""
    statement = f"SELECT body FROM stream WHERE kind = '{kind}' ORDER BY seq"  # noqa: S608
    return [json.loads(body) for body in worker.column(statement)]


async def settled(worker: Worker, answer: Answer, worth: int, event: str = "a") -> None:
    """Let a bid win and its impression bring so much."""
    await worker.report(
        Report("won", ticket=answer.ticket, clearing=1000),
        Report("value", ref=answer.ref, value=worth, event_id=event),
    )


@pytest.mark.parametrize("arrival", ["once", "accrues"])
async def test_features_travel_from_the_bid_to_the_price(migrated_url: str, arrival: str) -> None:
    """In the ticket, in win and value, in the fold; then each opportunity has its own price."""
    async with working(migrated_url) as worker:
        await worker.create(policy=LINEAR, value={**ONE, "arrival": arrival})
        assert (await worker.bid(features=PHONE)).bid == CAP
        for turn in range(40):
            for features, worth in ((PHONE, CAP // 2), (DESK, 0)):
                await settled(worker, await worker.bid(features=features), worth, str(turn))
        # Where values accrue, nothing is worthless before its window is over.
        worker.pass_service_ms(2 * WINDOW_MS)
        await worker.report(Report("lost", ticket=(await worker.bid()).ticket))
        await worker.learn()
        sums = Sums.from_bytes(memory(worker).part("linear"), 32)
        assert sums.lessons == 80
        for kind in ("won", "value"):
            carried = [hashing.from_bytes(b64decode(b["features"])) for b in bodies(worker, kind)]
            assert carried == [hashed(worker, PHONE), hashed(worker, DESK)] * 40
        phone, desk = [(await worker.bid(features=one)).bid or 0 for one in (PHONE, DESK)]
        assert 0 < desk < phone < CAP
        shown = (await worker.operator.state(NAME))["certainty"]["features"]
        assert (shown["dimensions"], shown["lessons"]) == (32, 80)


async def test_raw_features_are_kept_nowhere_and_hashed_ones_only_where_read(
    migrated_url: str,
) -> None:
    """Neither stream nor decision log names them; another method's tickets carry none."""
    async with working(migrated_url) as worker:
        await worker.create()
        plain = await worker.bid(features={"place": "invented-word"})
        await settled(worker, plain, 5)
        await worker.create(id="other", policy=LINEAR, value=ONE)
        rich = await worker.bid("other", features={"place": "invented-word"})
        await settled(worker, rich, 5)
        await worker.upkeep.log()
        won = bodies(worker, "won")
        assert ["features" in body for body in won] == [False, True]
        kept = [json.dumps(won), *map(str, worker.column("SELECT body FROM stream"))]
        columns = worker.database.read(
            lambda c: [dict(r._mapping) for r in c.exec_driver_sql("SELECT * FROM decision")]
        )
        assert len(columns) == 2
        assert "invented-word" not in f"{kept} {columns} {plain.ticket} {rich.ticket}"


async def test_a_bill_before_its_win_carries_them_too(migrated_url: str) -> None:
    """Where the bill is what counts, it is the bill that teaches, and the value finds it."""
    async with working(migrated_url) as worker:
        await worker.create(policy=LINEAR, value={**ONE, "arrival": "accrues"}, spend_on="billed")
        answer = await worker.bid(features=PHONE, value_hint=HINT)
        billed = Report("billed", ticket=answer.ticket, clearing=1000)
        value = Report("value", ref=answer.ref, value=7, event_id="a")
        await worker.report(billed)
        await worker.report(value)
        await worker.report(Report("won", ticket=answer.ticket, clearing=1000))
        await worker.learn()
        sums = Sums.from_bytes(memory(worker).part("linear"), 32)
        assert sums.lessons == 1
        assert any(sums.moment)
        [said] = bodies(worker, "value")
        assert said["hint"] == HINT


async def test_hints_are_carried_before_they_are_bid_by(migrated_url: str) -> None:
    """A line item that turns them on learns from those that came before, and off forgets."""
    async with working(migrated_url) as worker:
        await worker.create(policy={"method": "mean"}, value=ONE)
        for turn in range(30):
            answer = await worker.bid(value_hint=HINT)
            await settled(worker, answer, HINT // 2, str(turn))
        plain = await worker.bid()
        patched = await worker.operator.patch(
            NAME, {"value": {"hints": True}}, 1, None, None, "tester"
        )
        await worker.learn()
        book = Book.from_bytes(memory(worker).part("hints"))
        assert (book.closed.impressions, book.closed.amount) == (30, 15 * HINT)
        hinted, without = await worker.bid(value_hint=HINT), await worker.bid()
        assert HINT // 2 < (hinted.bid or 0) < HINT * 6 // 10
        assert hinted.set_by == "value"
        shown = (await worker.operator.state(NAME))["certainty"]["hints"]
        assert shown["ratio"] == pytest.approx((hinted.bid or 0) / HINT, rel=1e-6)
        off = {"value": {"hints": False}}
        await worker.operator.patch(NAME, off, patched.version, None, None, "tester")
        await worker.learn()
        assert memory(worker).part("hints") == b""
        assert plain.bid is not None
        assert (await worker.bid(value_hint=HINT)).bid == (await worker.bid()).bid == without.bid


async def test_another_size_is_folded_again_from_what_was_kept(migrated_url: str) -> None:
    """Lessons keep 64 places, so a change of dimensions loses nothing; taken back, same bytes."""
    async with working(migrated_url) as worker:
        await worker.create(policy=LINEAR, value=ONE)
        for turn in range(12):
            await settled(worker, await worker.bid(features=PHONE), CAP // 3, str(turn))
        await worker.learn()
        before = memory(worker)
        for version, size in ((1, 64), (2, 32)):
            change = {"policy": {"method": "linear", "dimensions": size}}
            await worker.operator.patch(NAME, change, version, None, None, "tester")
            await worker.upkeep.follow()
            assert (await worker.bid(features=PHONE)).reason == "learner_halted"
            await worker.learn()
            assert Sums.from_bytes(memory(worker).part("linear"), size).lessons == 12
            assert (await worker.bid(features=PHONE)).bid is not None
        assert memory(worker) == before


async def test_what_is_retracted_is_gone_from_the_ridge(migrated_url: str) -> None:
    """The value part of a win takes the impression out of the sums, to the byte."""
    async with working(migrated_url) as worker:
        await worker.create(policy=LINEAR, value={**ONE, "arrival": "accrues"})
        await settled(worker, await worker.bid(features=PHONE), CAP // 3)
        await worker.learn()
        before = memory(worker).part("linear")
        wrong = await worker.bid(features=DESK)
        await settled(worker, wrong, CAP)
        await worker.learn()
        assert memory(worker).part("linear") != before
        wish = Retraction("value", refs=(str(wrong.ref),))
        await worker.operator.winding.retract(NAME, wish, "a broken pixel", "tester")
        await worker.learn()
        after = worker.database.read(lambda c: learners.snapshots(c, [NAME]))[NAME]
        assert Memory.from_bytes(after.state).part("linear") == before


async def test_an_outcome_set_aside_keeps_what_its_ticket_carried(migrated_url: str) -> None:
    """Tried again from quarantine, it teaches what it would have taught."""
    async with working(migrated_url) as worker:
        await worker.create(policy=LINEAR, value=ONE)
        answer = await worker.bid(features=PHONE, value_hint=HINT)
        booking = worker.feedback._reader.read(Report("won", ticket=answer.ticket, clearing=5))
        assert not hasattr(booking, "status")
        kept = json.loads(json.dumps(written(booking)))
        assert booking_of(NAME, kept) == booking
        assert hashing.from_bytes(booking.features) == hashed(worker, PHONE)
