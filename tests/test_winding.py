"""Taking lessons back over a real database: the learner ends as if it had never seen them."""

from __future__ import annotations

import asyncio
from typing import Any

import pytest

from service.errors import Malformed, NotFound
from service.feedback import Report
from service.learner.memory import Memory
from service.ledger.cancelling import PARTS, Cancelled
from service.store import learners, lessons, line_items, rebuilds
from service.store.rebuilds import Start
from service.teaching import FRESH, lesson
from service.winding import Retraction
from tests.builders import NAME, PRICE, Worker, working

pytestmark = pytest.mark.anyio

MEAN = {"method": "mean"}
ONE = 10_000_000  # The value of the first win, of the second two of it, and so on.


async def history(worker: Worker, wins: int = 8) -> list[Any]:
    """Wins of two sources, each with a value, learnt one after the other."""
    bids = []
    for n in range(wins):
        bid = await worker.bid(source="north" if n % 2 else "south")
        bids.append(bid)
        await worker.report(Report("won", bid.ticket, clearing=PRICE // 2))
        await worker.report(Report("value", ref=bid.ref, value=ONE * (n + 1), event_id=f"e{n}"))
        worker.pass_service_ms(2000)
        await worker.learn()
    return bids


def published(worker: Worker) -> learners.Snapshot:
    """The snapshot that people bid by."""
    return worker.database.read(lambda c: learners.snapshots(c, [NAME]))[NAME]


def from_zero(worker: Worker) -> bytes:
    """The fold of the whole stream with its cancellations."""
    return worker.database.read(lambda c: rebuilds.fold_all(c, NAME, FRESH, lesson))


def never_seen(worker: Worker, seqs: set[int]) -> bytes:
    """A learner over the same stream from which these entries are missing, by hand."""

    def fold(connection: Any) -> bytes:
        page = lessons.read(connection, NAME, 0, 10_000, Cancelled())
        kept = [one for n, one in zip(page.seqs, page.lessons, strict=True) if n not in seqs]
        return lesson(FRESH, kept, line_items.one(connection, NAME).config)

    return worker.database.read(fold)


def seqs(worker: Worker, where: str = "1 = 1") -> set[int]:
    """The seqs of lessons for which a condition holds."""
    kinds = ", ".join(f"'{kind}'" for kind in PARTS)
    return set(worker.column(f"SELECT seq FROM stream WHERE kind IN ({kinds}) AND {where}"))  # noqa: S608


def total(state: bytes) -> Any:
    """The sums of a state."""
    return Memory.from_bytes(state).total


async def retract(worker: Worker, wish: Retraction, **more: Any) -> dict[str, Any]:
    """Retract as an operator."""
    return await worker.operator.winding.retract(NAME, wish, "a broken pixel", "tester", **more)


async def rewind(worker: Worker, to: int, **more: Any) -> dict[str, Any]:
    """Rewind as an operator."""
    return await worker.operator.winding.rewind(NAME, to, "a bad night", "tester", **more)


async def test_a_retracted_source_was_never_seen(migrated_url: str) -> None:
    """Byte for byte; money and balances stay, and the journal says why."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker)
        money = worker.balance()
        told = await retract(worker, Retraction("both", source="north"))
        assert told["counts"] == {"won": 4, "value": 4}
        assert (told["before"]["wins"], told["after"]["wins"], told["published"]) == (8, 4, True)
        gone = {n for first, last in told["spans"] for n in range(first, last + 1)}
        assert len(gone) == 8
        assert published(worker).state == never_seen(worker, gone) == from_zero(worker)
        assert worker.balance() == {
            **money,
            "seq": money["seq"] + 1,
            "at_ms": worker.balance()["at_ms"],
        }
        assert worker.audit() == []
        row = worker.one("SELECT reason FROM journal WHERE action = 'retract'")
        assert row == "a broken pixel"


async def test_nobody_bids_until_the_refolded_snapshot_is_out(migrated_url: str) -> None:
    """The line item passes `learner_halted`, also in a worker that has a good snapshot still."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker)
        assert (await worker.bid()).bid is not None

        def halt(connection: Any) -> None:
            cut = [(2, 6, "all")]
            seq = rebuilds.standing(connection, NAME).head
            lessons.cancel(connection, NAME, seq, "all", cut)
            rebuilds.put_back(connection, NAME, cut, FRESH)

        worker.database.write(halt)
        await worker.upkeep.follow()
        assert (await worker.bid()).reason == "learner_halted"
        state = await worker.operator.state(NAME)
        assert (state["bid"]["pass"], state["learner"]["halted"]) == ("learner_halted", True)
        await worker.learn()
        assert (await worker.bid()).bid is not None
        assert published(worker).state == from_zero(worker)


async def test_a_preview_changes_nothing_and_tells_what_would(migrated_url: str) -> None:
    """The same counts and the same estimate as the order gives after it."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker)
        head, before = worker.balance(), published(worker)
        wish = Retraction("value", event_ids=("e1", "e2"))
        told = await retract(worker, wish, preview=True)
        assert (worker.balance(), published(worker)) == (head, before)
        assert worker.column("SELECT action FROM journal") == ["create"]
        done = await retract(worker, wish)
        for name in ("cancelled", "counts", "spans", "before"):
            assert told[name] == done[name]
        assert told["after"]["mean_nanos"] == done["after"]["mean_nanos"]
        back = await rewind(worker, 3, preview=True)
        assert back["after"]["wins"] == 1 < back["before"]["wins"]
        assert published(worker).state == from_zero(worker)


async def test_an_order_given_twice_is_done_once(migrated_url: str) -> None:
    """By its key, and without one because nothing is left to cancel."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        bids = await history(worker)
        wish = Retraction("both", refs=(str(bids[0].ref),))
        first = await retract(worker, wish, idempotency="k")
        again = await retract(worker, wish, idempotency="k")
        assert {**first, "after": None} == {**again, "after": None}
        third = await retract(worker, wish)
        assert (third["cancelled"], third["seq"], third["published"]) == (0, None, True)
        assert worker.column("SELECT kind FROM stream WHERE kind = 'retract'") == ["retract"]
        state = published(worker).state
        await rewind(worker, 8)
        last = await rewind(worker, 8)
        assert (last["cancelled"], last["seq"]) == (0, None)
        assert published(worker).state != state
        assert worker.column("SELECT kind FROM stream WHERE kind = 'rewind'") == ["rewind"]


async def test_each_part_goes_alone(migrated_url: str) -> None:
    """The market part leaves the impression, the value part leaves the price."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        bids = await history(worker, 4)
        refs = (str(bids[0].ref),)
        await retract(worker, Retraction("market", refs=refs))
        assert (total(published(worker).state).wins, total(published(worker).state).known) == (3, 4)
        await retract(worker, Retraction("value", refs=(str(bids[1].ref),)))
        sums = total(published(worker).state)
        assert (sums.wins, sums.known, sums.amount) == (3, 3, 8 * ONE)
        # What was in two halves is then whole: as if it had never been.
        await retract(worker, Retraction("value", refs=refs))
        gone = seqs(worker, "bid IS NOT NULL AND seq <= 4")
        both = await retract(worker, Retraction("market", refs=(str(bids[1].ref),)))
        assert both["cancelled"] == 1
        assert len(gone) == 2
        assert total(published(worker).state).known == 2
        assert published(worker).state == from_zero(worker)


async def test_later_news_of_what_was_taken_back(migrated_url: str) -> None:
    """A retracted impression brings nothing later; a correction of a retracted value is a first."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN, value={"arrival": "accrues", "window_s": 60_000})
        bids = await history(worker, 4)
        await retract(worker, Retraction("both", refs=(str(bids[0].ref),)))
        await retract(worker, Retraction("value", event_ids=("e1",)))
        fix = Report("value", ref=bids[1].ref, value=70, event_id="f", corrects="e1")
        more = Report("value", ref=bids[0].ref, value=9_000_000, event_id="g")
        assert [r.status for r in await worker.report(fix, more)] == ["recorded", "recorded"]
        await worker.learn()
        assert total(published(worker).state).amount == 70 + 7 * ONE
        assert total(published(worker).state).converted == 3
        assert published(worker).state == from_zero(worker)


@pytest.mark.parametrize("to", [0, 1, 5, 12, 13])
async def test_a_rewound_learner_never_saw_what_came_after(migrated_url: str, to: int) -> None:
    """Byte for byte, from a checkpoint or from the beginning."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker)
        assert worker.column("SELECT seq FROM checkpoint") == [10]
        gone = seqs(worker, f"seq > {to}")
        told = await rewind(worker, to)
        assert told["cancelled"] == len(gone)
        assert told["refolds_from"] == (10 if to >= 10 else 0)
        assert published(worker).state == never_seen(worker, gone) == from_zero(worker)
        bid = await worker.bid()
        await worker.report(Report("won", bid.ticket, clearing=PRICE))
        await worker.learn()
        assert published(worker).state == never_seen(worker, gone) == from_zero(worker)
        assert worker.audit() == []


async def test_a_rewind_undoes_a_reset(migrated_url: str) -> None:
    """What was won before the reset may teach again, also by news that comes later."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN, value={"arrival": "accrues"})
        bids = await history(worker, 3)
        head = worker.balance()["seq"]
        await worker.operator.reset(NAME, "a try", "tester")
        await worker.learn()
        assert total(published(worker).state).wins == 0
        await rewind(worker, head)
        assert total(published(worker).state).wins == 3
        assert worker.one("SELECT reset_seq FROM learner") == 0
        await worker.report(Report("value", ref=bids[0].ref, value=5, event_id="late"))
        await worker.learn()
        assert total(published(worker).state).amount == 6 * ONE + 5


async def test_a_rewind_to_a_moment(migrated_url: str) -> None:
    """The last entry stamped at or before it is the last that stands."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker, 3)
        at_ms = worker.one("SELECT at_ms FROM stream WHERE seq = 4")
        last = worker.one("SELECT max(seq) FROM stream WHERE at_ms <= :at", at=at_ms)
        gone = seqs(worker, f"seq > {last}")
        await worker.operator.winding.rewind(NAME, 0, "a try", "tester", at_ms=at_ms)
        assert published(worker).state == never_seen(worker, gone)


async def test_a_damaged_checkpoint_is_refused_and_an_earlier_one_used(migrated_url: str) -> None:
    """Its digest does not match; the refold is right all the same."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker, 12)
        assert worker.column("SELECT seq FROM checkpoint ORDER BY seq") == [10, 20]
        worker.run("UPDATE checkpoint SET state = :state WHERE seq = 20", state=FRESH)
        start = worker.database.read(lambda c: rebuilds.nearest(c, NAME, 24, FRESH))
        assert (start.seq, start.refused) == (10, (20,))
        gone = seqs(worker, "seq > 22")
        assert (await rewind(worker, 22))["refolds_from"] == 10
        assert published(worker).state == never_seen(worker, gone)
        # The refold has kept a sound one behind it.
        head = worker.balance()["seq"]
        start = worker.database.read(lambda c: rebuilds.nearest(c, NAME, head, FRESH))
        assert (start.seq, start.refused) == (head, ())


async def test_wins_that_race_an_order_are_before_or_behind_it(migrated_url: str) -> None:
    """What the stream took before the order is cancelled, what it took after is not."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker, 4)
        bids = [await worker.bid(source="north") for _ in range(30)]
        reports = [worker.report(Report("won", bid.ticket, clearing=PRICE)) for bid in bids]
        told, *_ = await asyncio.gather(
            retract(worker, Retraction("both", source="north")), *reports
        )
        wins = seqs(worker, "kind = 'won' AND body LIKE '%north%'")
        before = {seq for seq in wins if seq < told["seq"]}
        gone = {n for first, last in told["spans"] for n in range(first, last + 1)}
        assert told["spans_in_all"] == len(told["spans"])
        assert before <= gone
        await worker.learn()
        assert published(worker).state == never_seen(worker, gone) == from_zero(worker)
        assert total(published(worker).state).wins == 2 + len(wins - before)


async def test_what_cannot_be_ordered_is_refused(migrated_url: str) -> None:
    """Nothing named, two ways at once, no ref, no such moment, no such line item."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        for wish in (Retraction("both"), Retraction("both", refs=("x",), source="a")):
            with pytest.raises(Malformed):
                await retract(worker, wish)
        with pytest.raises(Malformed, match="ref"):
            await retract(worker, Retraction("both", refs=("x",)))
        with pytest.raises(Malformed, match="come so far"):
            await rewind(worker, 99)
        with pytest.raises(NotFound):
            await worker.operator.winding.rewind("meadow", 0, "a try", "tester")
        with pytest.raises(NotFound):
            await worker.operator.winding.retract(
                "meadow", Retraction("both", source="a"), "a try", "tester"
            )


async def test_a_change_of_terms_refolds_with_what_is_cancelled(migrated_url: str) -> None:
    """No checkpoint of the old terms is left, and the cancelled lessons stay out."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker)
        await retract(worker, Retraction("both", source="north"))
        await worker.operator.patch(
            NAME, {"value": {"ceiling": 35_000_000}}, 1, None, "a try", "tester"
        )
        assert worker.column("SELECT seq FROM checkpoint") == []
        await worker.learn()
        assert total(published(worker).state).amount == 11 * ONE
        head = worker.balance()["seq"]
        await history(worker, 3)
        start = worker.database.read(lambda c: rebuilds.nearest(c, NAME, head, FRESH))
        assert start.seq == head

        def tail(connection: Any) -> bytes:
            return rebuilds.fold_until(connection, NAME, start, 10_000, lesson)

        def whole(connection: Any) -> bytes:
            return rebuilds.fold_until(connection, NAME, Start(0, FRESH), 10_000, lesson)

        assert worker.database.read(tail) == worker.database.read(whole)
