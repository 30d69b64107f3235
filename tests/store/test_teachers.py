"""Teaching: one teacher at a time, in the order of the stream, and equal to a fold from zero."""

from __future__ import annotations

import json
import threading
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest
from sqlalchemy import text

from service.learner.memory import Memory
from service.ledger.entries import Entry
from service.store import changes, learners, rebuilds, teachers
from service.store.database import Database
from service.store.lessons import Lesson
from service.teaching import FRESH, lesson
from tests.builders import NAME, append, begin, line_item, pass_service_ms, valued, won


def _teach(database: Database, every: int = 1000, fold: teachers.Fold = lesson) -> int:
    return teachers.teach(database, NAME, fold, every)


def _snapshot(database: Database) -> learners.Snapshot:
    return database.read(lambda c: learners.snapshots(c, [NAME]))[NAME]


def _from_zero(database: Database) -> bytes:
    return database.read(lambda c: rebuilds.fold_all(c, NAME, FRESH, lesson))


def _checkpoints(database: Database) -> list[int]:
    statement = text("SELECT seq FROM checkpoint ORDER BY seq")
    return list(database.read(lambda c: c.execute(statement).scalars().all()))


def _announced(database: Database) -> int:
    return database.read(changes.latest)


def test_entries_are_folded_in_the_order_of_seq(migrated_url: str) -> None:
    """A teacher reads each entry once, in the order in which the stream took them."""
    database, read = Database(migrated_url), list[int]()
    begin(database)

    def fold(state: bytes, lessons: list[Lesson], _: dict[str, Any]) -> bytes:
        read.extend(body["n"] for kind, body, *_ in lessons if kind == "mark")
        return state

    for n in range(10):
        append(database, Entry("mark", {"n": n}))
        if n % 3 == 0:
            _teach(database, fold=fold)
    _teach(database, fold=fold)
    assert read == list(range(10))
    assert _teach(database, fold=fold) == 0
    assert database.read(learners.behind) == []
    database.close()


def test_a_snapshot_is_announced_only_when_it_changed(migrated_url: str) -> None:
    """Entries that teach nothing move the seq and disturb no worker."""
    database = Database(migrated_url)
    begin(database)
    before = _announced(database)
    append(database, Entry("mark", {}))
    assert _teach(database) == 2
    assert (_announced(database), _snapshot(database).seq) == (before, 0)
    append(database, won(1))
    assert _teach(database) == 1
    assert (_announced(database), _snapshot(database).seq) == (before + 1, 3)
    assert Memory.from_bytes(_snapshot(database).state).total.wins == 1
    assert _snapshot(database).sound
    database.close()


def test_a_checkpoint_is_kept_every_so_many_entries(migrated_url: str) -> None:
    """A rebuild never has to fold more entries than lie between two checkpoints."""
    database = Database(migrated_url)
    begin(database)
    for number in range(1, 20):
        append(database, won(number))
        _teach(database, every=5)
    assert _checkpoints(database) == [5, 10, 15, 20]
    kept = database.read(
        lambda c: c.execute(text("SELECT state, digest FROM checkpoint WHERE seq = 10")).one()
    )
    assert Memory.from_bytes(bytes(kept.state)).total.wins == 9
    assert learners.digest_of(bytes(kept.state)) == kept.digest
    database.close()


def test_learning_piece_by_piece_equals_a_fold_from_zero(migrated_url: str) -> None:
    """However the stream was cut into lessons, the state is the same to the byte."""
    database = Database(migrated_url)
    begin(database)
    for number in range(1, 40):
        append(database, won(number, 100 * number), valued(number, 10**7 * (number % 4)))
        if number % 7 == 0:
            append(database, valued(number, 5, "b", was=10**7 * (number % 4)))
        if number == 20:
            append(database, Entry("reset", {}))
        if number % 3 == 0:
            _teach(database)
    _teach(database)
    assert _snapshot(database).state == _from_zero(database) != FRESH
    database.close()


def test_a_long_stream_is_published_only_when_caught_up(migrated_url: str) -> None:
    """Half a refold is never public, and the last full piece is published without another entry."""
    database, most = Database(migrated_url), teachers.ENTRIES_MAX
    begin(database)
    append(database, *(won(number) for number in range(1, most)))
    assert _teach(database) == most
    assert _snapshot(database).seq == 0
    assert _teach(database) == 0
    assert _snapshot(database).seq == most
    assert Memory.from_bytes(_snapshot(database).state).total.wins == most - 1
    database.close()


def test_two_teachers_at_once_neither_lose_nor_repeat_an_entry(migrated_url: str) -> None:
    """Teachers of two workers pass each other by while entries keep coming."""
    databases = [Database(migrated_url) for _ in range(3)]
    begin(databases[0])
    done = threading.Event()

    def teach(database: Database) -> int:
        read = 0
        while not done.is_set():
            read += _teach(database)
        return read

    with ThreadPoolExecutor(2) as pool:
        teachers = [pool.submit(teach, database) for database in databases[:2]]
        for number in range(1, 61):
            append(databases[2], won(number))
        done.set()
        read = sum(teacher.result() for teacher in teachers) + _teach(databases[2])
    assert read == 61
    assert Memory.from_bytes(_snapshot(databases[2]).state).total.wins == 60
    assert _snapshot(databases[2]).state == _from_zero(databases[2])
    for database in databases:
        database.close()


def test_a_refold_reads_everything_under_the_new_terms(migrated_url: str) -> None:
    """After a change of ceiling the state is a fresh fold, and no old checkpoint is left."""
    database = Database(migrated_url)
    begin(database)
    append(database, won(1), valued(1, 80_000_000), won(2), valued(2, 10_000_000))
    _teach(database, every=2)
    assert _checkpoints(database) == [5]
    changed = line_item(value={"ceiling": 50_000_000})
    _store_config(database, changed)
    database.write(lambda c: learners.refold(c, NAME, FRESH))
    assert _checkpoints(database) == []
    _teach(database, every=2)
    tally = Memory.from_bytes(_snapshot(database).state).total
    assert (tally.amount, tally.clipped) == (60_000_000, 1)
    assert _snapshot(database).state == _from_zero(database)
    database.close()


def _store_config(database: Database, config: dict[str, Any]) -> None:
    statement = text("UPDATE line_item SET config = :config WHERE id = :id")
    row = {"config": json.dumps(config), "id": config["id"]}
    database.write(lambda c: c.execute(statement, row))


def test_a_window_closes_by_service_time_only(migrated_url: str) -> None:
    """While everything is away no window closes, whatever the wall clock says."""
    database = Database(migrated_url, wall_ms=lambda: 10**15)
    begin(database, value={"arrival": "accrues", "window_ms": 1000})
    append(database, won(1), Entry("mark", {}))
    _teach(database)
    assert _known(database) == 0
    pass_service_ms(database, 2000)
    append(database, Entry("mark", {}))
    _teach(database)
    assert _known(database) == 1
    assert _snapshot(database).state == _from_zero(database)
    database.close()


def _known(database: Database) -> int:
    return Memory.from_bytes(_snapshot(database).state).total.known


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_a_state_that_was_changed_is_not_sound(migrated_url: str) -> None:
    """The digest tells a damaged state from the one that was published."""
    database = Database(migrated_url)
    begin(database)
    assert _snapshot(database).sound
    database.write(lambda c: c.execute(text("UPDATE learner SET state = X'7B7D'")))
    assert not _snapshot(database).sound
    database.close()
