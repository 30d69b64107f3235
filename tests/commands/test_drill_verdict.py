"""The judgement after a drill sees every kind of broken promise, and none where all are kept."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import closing

import pytest

from service.commands.drill_record import History, Read, Sent, how_ended
from service.commands.drill_verdict import held, judge, recovery_s
from service.commands.wire import Reply
from service.guard.ticket import ref_of
from service.store.database import Database
from tests.money.scene import NAME, Scene

GRACE_S = 12.0
COST = 7


@pytest.fixture
def scene(migrated_url: str) -> Iterator[Scene]:
    """A line item with a win of 7 and nothing held, on each database."""
    with closing(Database(migrated_url)) as database:
        scene = Scene(database)
        scene.lease()
        scene.tell(scene.placed(8), "won", COST)
        scene.retire()
        yield scene


def told(scene: Scene, price: int = COST) -> Sent:
    """The exchange's row of that win, with its receipt."""
    ref = ref_of(scene.bids[0].id)
    return Sent(NAME, ref, "result", "won", price, {}, 1.0, tries=1, acknowledged_s=2.0)


def history(*rows: Sent) -> History:
    """The books of an exchange that sent these rows."""
    books = History()
    for row in rows:
        books.sell(row)
    return books


def test_books_that_agree_have_no_fault(scene: Scene) -> None:
    """One win, told, booked and charged once."""
    assert judge(history(told(scene)), scene.database, GRACE_S) == []
    assert held(scene.database) == 0


def lost(scene: Scene) -> History:
    """A receipt came for a bid that we have no trace of."""
    gone = Sent(NAME, ref_of(bytes(16)), "result", "lost", 0, {}, 1.0, 1, 2.0)
    return history(told(scene), gone)


def invented(scene: Scene) -> History:
    """We have booked what the exchange does not know."""
    return history()


def untold(scene: Scene) -> History:
    """We have booked what never left the exchange."""
    row = told(scene)
    row.tries, row.acknowledged_s = 0, None
    return history(row)


def dearer(scene: Scene) -> History:
    """The exchange charged more than we booked."""
    return history(told(scene, COST + 1))


def still_held(scene: Scene) -> History:
    """A slice is open though grace is over."""
    scene.lease()
    return history(told(scene))


def unfunded(scene: Scene) -> History:
    """A cost without money, though its receipt came in time."""
    scene.database.write(lambda c: c.exec_driver_sql("UPDATE balance SET spent = 0, unfunded = 7"))
    return history(told(scene))


def broken_read(scene: Scene) -> History:
    """A look at the money saw too much of it."""
    books = history(told(scene))
    books.look(Read(NAME, budget=10, spent=8, held=3, cost=8, acknowledged_before=0,
                    charged_after=8))  # fmt: skip
    return books


@pytest.mark.parametrize(
    ("play", "word"),
    [
        (lost, "lost:"),
        (invented, "invented:"),
        (untold, "never told"),
        (dearer, "charged 8, we booked 7"),
        (still_held, "still held"),
        (unfunded, "unfunded though"),
        (broken_read, "V1:"),
    ],
)
def test_a_broken_promise_is_seen(
    scene: Scene, play: Callable[[Scene], History], word: str
) -> None:
    """Each kind is named in words."""
    faults = judge(play(scene), scene.database, GRACE_S)
    assert [fault for fault in faults if word in fault] != []


def test_a_late_receipt_excuses_an_unfunded_cost(scene: Scene) -> None:
    """Only while every delay stays within grace must all cost be funded."""
    books = unfunded(scene)
    books.sent[0].acknowledged_s = books.sent[0].first_s + GRACE_S + 1
    assert [f for f in judge(books, scene.database, GRACE_S) if "unfunded though" in f] == []


@pytest.mark.parametrize(
    ("read", "word"),
    [
        (Read(NAME, 10, 8, 2, 8, 8, 8), None),
        (Read(NAME, 10, 8, 3, 8, 8, 8), "V1"),
        (Read(NAME, 10, 7, 0, 7, 8, 8), "lost"),
        (Read(NAME, 10, 9, 0, 9, 8, 8), "invented"),
    ],
)
def test_a_look_at_the_money_is_held_against_both_books(read: Read, word: str | None) -> None:
    """At least what was acknowledged before, at most what was charged by its end."""
    fault = read.fault()
    assert fault is None if word is None else word in str(fault)


@pytest.mark.parametrize(
    ("status", "how"), [(200, "ok"), (503, "unknown"), (500, "refused"), (404, "refused")]
)
def test_an_answer_says_what_became_of_the_call(status: int, how: str) -> None:
    """503 says of itself that the call may have happened."""
    assert how_ended(Reply(status, b"{}")) == how


def test_a_receipt_that_settles_nothing_is_a_fault() -> None:
    """Refusals and conflicts have no place in these plays."""
    row = Sent(NAME, "r", "result", "won", 1, {}, 1.0)
    books = history(row)
    books.receive(row, "refused", "bad_ticket")
    assert books.faults == ["an outcome was refused: bad_ticket"]
    books.receive(row, "recorded", None)
    books.receive(row, "duplicate", None)
    assert books.acknowledged[NAME] == 1


def test_recovery_is_the_time_to_the_next_receipt() -> None:
    """From each return of the database; one without a receipt after it has none."""
    assert recovery_s([1.0, 4.0, 9.0], [0.5, 1.5, 4.25]) == [0.5, 0.25]
