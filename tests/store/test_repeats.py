"""An order sent twice under one key is done once, and answered the same."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor

import pytest

from service.errors import Conflict
from service.store.database import Database, Writing
from service.store.journal import newest, note
from service.store.repeats import Repeat, once


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    yield database
    database.close()


def order(database: Database, repeat: Repeat | None, answer: int = 1) -> dict[str, int]:
    """Do a piece of work that leaves a row behind each time it is really done."""

    def work(connection: Writing) -> dict[str, int]:
        def done() -> dict[str, int]:
            note(
                connection,
                wall_ms=1,
                actor="tester",
                action="act",
                line_item="a",
                reason="r",
                detail={},
            )
            return {"answer": answer}

        return once(connection, repeat, done, 1)

    return database.write(work)


def times(database: Database) -> int:
    """How often the work was really done."""
    return len(database.read(lambda connection: newest(connection, "a", 100)))


def test_the_first_answer_stands(database: Database) -> None:
    """The second call under a key gets the first answer, and nothing is done again."""
    repeat = Repeat("tester", "key-1", {"wish": 1})

    assert [order(database, repeat, 1), order(database, repeat, 2)] == [{"answer": 1}] * 2
    assert times(database) == 1


def test_without_a_key_every_call_is_done(database: Database) -> None:
    """Nobody asked for it to be remembered, so it is done again."""
    order(database, None)
    order(database, None)
    assert times(database) == 2


def test_another_wish_under_the_same_key_is_refused(database: Database) -> None:
    """A key names one wish; a second wish under it changes nothing."""
    order(database, Repeat("tester", "key-1", {"wish": 1}))

    with pytest.raises(Conflict) as refused:
        order(database, Repeat("tester", "key-1", {"wish": 2}))
    assert refused.value.code == "idempotency_key_reused"
    assert times(database) == 1


def test_keys_of_two_people_do_not_meet(database: Database) -> None:
    """The same text from another actor is another key."""
    order(database, Repeat("tester", "key-1", {"wish": 1}))
    order(database, Repeat("other", "key-1", {"wish": 2}))
    assert times(database) == 2


def test_a_failed_order_is_not_remembered(database: Database) -> None:
    """What was rolled back may be tried again under the same key."""
    repeat = Repeat("tester", "key-1", {"wish": 1})

    def broken() -> dict[str, int]:
        raise KeyError("the work failed")

    def fails(connection: Writing) -> None:
        once(connection, repeat, broken, 1)

    with pytest.raises(KeyError):
        database.write(fails)
    assert order(database, repeat) == {"answer": 1}


def test_twins_at_the_same_instant_are_done_once(database: Database) -> None:
    """Six calls at once under one key do the work once and all get its answer."""
    repeat = Repeat("tester", "key-1", {"wish": 1})
    with ThreadPoolExecutor(6) as pool:
        answers = list(pool.map(lambda n: order(database, repeat, n), range(6)))

    assert len({answer["answer"] for answer in answers}) == 1
    assert times(database) == 1
