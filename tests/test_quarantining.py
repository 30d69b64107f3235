"""What one bad row may do: it is set aside after three tries, and people may try it again."""

from __future__ import annotations

from typing import Any

import pytest

from service.errors import BrokenPromise, Conflict, NotFound
from service.feedback import Report
from service.learner.memory import Memory
from service.ledger.entries import Entry
from service.store import learners, rebuilds, teachers
from service.teaching import FRESH, lesson
from tests.builders import NAME, PRICE, Worker, append, won, working

pytestmark = pytest.mark.anyio

POISONED = Entry("lost", {"to_win": None}, bytes(16), "result")  # Without its `round`.


def published(worker: Worker) -> Any:
    """The sums that people bid by."""
    snapshot = worker.database.read(lambda c: learners.snapshots(c, [NAME]))[NAME]
    zero = worker.database.read(lambda c: rebuilds.fold_all(c, NAME, FRESH, lesson))
    assert snapshot.state == zero
    return Memory.from_bytes(snapshot.state).total


async def test_teaching_goes_on_past_a_lesson_that_crashes(migrated_url: str) -> None:
    """What came before is taught at once, what came behind after three tries; it is counted."""
    async with working(migrated_url) as worker:
        await worker.create()
        append(worker.database, won(1), POISONED, won(2), won(3))
        for turn in (1, 2):
            await worker.learn()
            assert worker.one("SELECT tries FROM learner") == turn
            assert worker.one("SELECT seq FROM learner") == 2
            assert worker.column("SELECT seq FROM quarantine") == []
        await worker.learn()
        assert worker.column("SELECT seq FROM quarantine") == [3]
        await worker.learn()
        assert (published(worker).wins, published(worker).losses) == (3, 0)
        assert (await worker.operator.state(NAME))["feed"]["quarantined"] == 1
        assert worker.one("SELECT action FROM journal WHERE actor = 'bidkeel'") == "quarantine"
        append(worker.database, won(4))
        await worker.learn()
        assert published(worker).wins == 4


@pytest.mark.parametrize("body", ["no json", "[]", '{"to_win": "x"}'])
async def test_a_damaged_row_stops_no_line_item(migrated_url: str, body: str) -> None:
    """Not even a body that is no JSON; two of them are set aside one after the other."""
    async with working(migrated_url) as worker:
        await worker.create()
        append(worker.database, won(1), won(2), won(3))
        worker.run("UPDATE stream SET body = :body WHERE seq IN (2, 4)", body=body)
        for _ in range(7):
            await worker.learn()
        assert worker.column("SELECT seq FROM quarantine ORDER BY seq") == [2, 4]
        assert published(worker).wins == 1


async def test_a_lesson_may_be_tried_again(migrated_url: str) -> None:
    """Once mended it teaches in its place; as bad as before, it is set aside anew."""
    async with working(migrated_url) as worker:
        await worker.create()
        append(worker.database, won(1), POISONED, won(2))
        for _ in range(4):
            await worker.learn()
        operator = worker.operator.quarantine
        (row,) = await operator.list(NAME, None, 10)
        assert (row["what"], row["seq"], row["state"]) == ("lesson", 3, "waiting")
        assert "round" in row["error"]
        again = await operator.retry(NAME, row["number"], "a try", "tester")
        assert (again["status"], again["published"]) == ("taught_again", True)
        rows = await operator.list(NAME, None, 10)
        assert [one["state"] for one in rows] == ["waiting", "retried"]
        worker.run('UPDATE stream SET body = \'{"round": 1, "to_win": 5}\' WHERE seq = 3')
        await operator.retry(NAME, rows[0]["number"], "mended", "tester")
        assert (published(worker).wins, published(worker).losses) == (2, 1)
        assert (await worker.operator.state(NAME))["feed"]["quarantined"] == 0


async def test_an_outcome_may_be_booked_after_all(migrated_url: str) -> None:
    """It is kept whole; while the fault lasts it stays, then it is booked once."""
    async with working(migrated_url) as worker:
        await worker.create()
        first, second = await worker.bids(2)
        # A slice that says less than it holds: its guard refuses the win.
        worker.run("UPDATE slice SET remaining = 0")
        (receipt,) = await worker.report(Report("won", first.ticket, clearing=PRICE))
        assert (receipt.status, receipt.code) == ("refused", "quarantined")
        operator = worker.operator.quarantine
        (row,) = await operator.list(NAME, None, 10)
        assert (row["what"], row["kind"], row["ref"]) == ("outcome", "won", first.ref)
        failed = await operator.retry(NAME, row["number"], "a try", "tester")
        assert failed["status"] == "failed"
        worker.run("UPDATE slice SET remaining = amount")
        assert (await operator.retry(NAME, row["number"], "ok", "tester"))["status"] == "recorded"
        assert (worker.balance()["spent"], worker.audit()) == (PRICE, [])
        with pytest.raises(Conflict):
            await operator.retry(NAME, row["number"], "twice", "tester")
        (again,) = await worker.report(Report("won", first.ticket, clearing=PRICE))
        assert again.status == "duplicate"
        assert second.bid == PRICE


async def test_a_row_may_be_let_go(migrated_url: str) -> None:
    """It counts no more, and the journal keeps what it was."""
    async with working(migrated_url) as worker:
        await worker.create()
        append(worker.database, POISONED)
        for _ in range(3):
            await worker.learn()
        operator = worker.operator.quarantine
        (row,) = await operator.list(NAME, None, 10)
        told = await operator.release(NAME, row["number"], "not ours", "tester")
        assert told["status"] == "released"
        assert (await worker.operator.state(NAME))["feed"]["quarantined"] == 0
        assert worker.one("SELECT reason FROM journal WHERE action = 'release'") == "not ours"
        with pytest.raises(Conflict):
            await operator.release(NAME, row["number"], "twice", "tester")
        with pytest.raises(NotFound):
            await operator.release(NAME, 99, "nothing", "tester")
        with pytest.raises(NotFound):
            await operator.list("meadow", None, 10)


async def test_an_error_of_ours_is_not_mistaken_for_a_bad_row(migrated_url: str) -> None:
    """A fold that breaks a promise ends the teacher, and sets nothing aside."""
    async with working(migrated_url) as worker:
        await worker.create()
        append(worker.database, won(1))

        def fold(*_: Any) -> bytes:
            raise BrokenPromise("ours")

        for _ in range(4):
            with pytest.raises(BrokenPromise):
                teachers.teach(worker.database, NAME, fold, 10)
        assert worker.column("SELECT seq FROM quarantine") == []
