"""The audit finds every promise that somebody broke behind the back of the rules."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing

import pytest
from sqlalchemy import text

from service.store import line_items
from service.store.audit import CHECKS, Finding, audit, unfunded
from service.store.database import Database, Writing
from tests.builders import append, line_item, won
from tests.money.scene import NAME, Scene

LOOSENED = ("balance", "local_day", "slice", "stream")
LOST_DAY = "2026-11-30"


@pytest.fixture(name="scene")
def _scene(migrated_url: str) -> Iterator[Scene]:
    """A win and a bill above their bids, a win that owes, a loss, and money in hand."""
    with closing(Database(migrated_url, pool_size=4)) as database:
        scene = Scene(database, "billed", daily_budget=300)
        scene.lease()
        first, second, third, _ = (scene.placed(8) for _ in range(4))
        for bid, kind, price in ((first, "won", 6), (first, "billed", 11), (second, "won", 5)):
            scene.tell(bid, kind, price)
        scene.tell(third, "lost", 9)
        yield scene


def alter(database: Database, statement: str) -> None:
    """Change rows that no constraint holds any more, as a disk or a hand might."""

    def work(connection: Writing) -> None:
        for table in LOOSENED:
            connection.execute(text(f"ALTER TABLE {table} RENAME TO sound_{table}"))
            copy = f"CREATE TABLE {table} AS SELECT * FROM sound_{table}"  # noqa: S608
            connection.execute(text(copy))
        if connection.execute(text(statement)).rowcount < 1:
            raise ValueError("this changes nothing")

    database.write(work)


def codes(found: list[Finding]) -> set[str]:
    """The promises that are named, V1 to V7."""
    return {finding.check.split()[0] for finding in found}


ALTERATIONS = [
    ("UPDATE balance SET spent = spent + 1000", "V1 V3 V7"),
    ("UPDATE balance SET budget = budget + 1", "V1"),
    ("UPDATE balance SET budget = budget + 1, target = target + 1", "V7"),
    ("UPDATE local_day SET budget = 20, target = 20", "V1"),
    ("UPDATE local_day SET budget = budget + 1", "V1"),
    ("UPDATE balance SET held = held + 1", "V2 V7"),
    ("UPDATE stream SET body = 'no json' WHERE kind = 'lease'", "V7"),
    ("UPDATE stream SET body = '{}' WHERE kind = 'won'", "V7"),
    ("UPDATE balance SET held = held - 1, spent = spent + 1", "V2 V3 V7"),
    ("UPDATE local_day SET held = held - 1", "V2"),
    ("UPDATE slice SET remaining = remaining - 1", "V2"),
    ("UPDATE slice SET owed = owed + 1", "V2"),
    ("UPDATE slice SET day = '2026-12-02'", "V2"),
    ("DELETE FROM slice", "V2"),
    ("UPDATE balance SET unfunded = unfunded + 1", "V3 V7"),
    ("UPDATE balance SET disputed = disputed - 1", "V3 V7"),
    ("UPDATE balance SET spent = spent - 1, unfunded = unfunded + 1", "V7"),
    ("UPDATE stream SET cost = cost - 1 WHERE kind = 'billed'", "V3"),
    (
        "INSERT INTO stream SELECT line_item, seq + 6, kind, at_ms, service_ms, bid, slot, 0, body"
        " FROM stream WHERE kind = 'lost'",
        "V4 V5 V7",
    ),
    ("DELETE FROM stream WHERE kind = 'lost'", "V5 V7"),
    ("UPDATE balance SET seq = seq + 1", "V5"),
    ("UPDATE stream SET seq = seq + 1 WHERE kind = 'lost'", "V5"),
    ("UPDATE slice SET remaining = -1", "V2 V6"),
    ("UPDATE slice SET owed = -1", "V2 V6"),
    ("UPDATE slice SET amount = 10", "V6"),
    ("UPDATE local_day SET spent = spent - 1", "V7"),
    ("UPDATE local_day SET over_spent = over_spent + 1", "V7"),
    ("UPDATE stream SET body = replace(body, '11,', '9,') WHERE kind = 'billed'", "V7"),
    ("UPDATE stream SET kind = 'lost' WHERE kind = 'billed'", "V7"),
]  # fmt: skip


@pytest.mark.parametrize(("statement", "promises"), ALTERATIONS)
def test_a_row_that_was_altered_is_found(scene: Scene, statement: str, promises: str) -> None:
    """By each check that it concerns, and by no other."""
    assert scene.database.read(audit) == []
    alter(scene.database, statement)
    assert codes(scene.database.read(audit)) == set(promises.split())


def test_every_promise_has_an_alteration_above() -> None:
    """V1 to V6 are statements, V7 is the replay; none of them goes untried."""
    tried = {code for _, promises in ALTERATIONS for code in promises.split()}
    assert tried == {check.split()[0] for check in CHECKS} | {"V7"}
    assert len(tried) == 7


def test_a_finding_says_where_and_by_how_much(scene: Scene) -> None:
    """The line item and the difference in nanos, ready for the journal; others stay silent."""
    scene.database.write(lambda c: line_items.create(c, line_item(id="orchard"), 1))
    alter(scene.database, "UPDATE balance SET held = held + 5 WHERE line_item = 'garden'")
    assert scene.database.read(audit) == [
        Finding("V2 held = sum of what slices hold", NAME, 5),
        Finding("V7 replayed held equals held", NAME, 5),
    ]


def test_a_spend_that_no_slice_stands_behind_is_found(migrated_url: str) -> None:
    """A win that was written into the stream alone does not agree with the balance."""
    with closing(Database(migrated_url)) as database:
        database.write(lambda connection: line_items.create(connection, line_item(), 1))
        entry = won(1, 7)
        append(database, type(entry)("won", {**entry.body, "slice": None}, entry.bid, "result"))
        assert database.read(audit) == [Finding("V7 replayed spent equals spent", NAME, -7)]


def test_an_empty_database_breaks_no_promise(migrated_url: str) -> None:
    """Nothing is promised yet."""
    with closing(Database(migrated_url)) as database:
        assert database.read(audit) == []
        assert database.read(unfunded) == 0


def test_a_day_that_a_restore_lost_is_no_finding(scene: Scene) -> None:
    """A late cost on a day that has no row is spent; the row may come later without it."""
    row = {"budget": 300, "day": LOST_DAY, "id": NAME}
    opened = text("INSERT INTO local_day VALUES (:id, :day, :budget, :budget, 0, 0, 0)")
    bid = scene.placed(8)
    told = scene.told(bid, "billed", 8, here=False)
    scene.book(type(told)(NAME, told.event, None, LOST_DAY))
    scene.database.write(lambda connection: connection.execute(opened, row))
    assert scene.database.read(audit) == []
    alter(scene.database, f"UPDATE local_day SET spent = 9 WHERE day = '{LOST_DAY}'")  # noqa: S608
    assert codes(scene.database.read(audit)) == {"V7"}


def test_v8_is_a_figure(scene: Scene) -> None:
    """The sum over all line items of what found no free money."""
    scene.database.write(lambda c: line_items.create(c, line_item(id="orchard"), 1))
    assert scene.database.read(unfunded) == 0
    alter(scene.database, "UPDATE balance SET unfunded = 7")
    assert scene.database.read(unfunded) == 14


def test_work_that_goes_on_meanwhile_raises_no_alarm(scene: Scene) -> None:
    """Every audit sees one moment, though money moves between its statements."""

    def work(turn: int) -> None:
        scene.lease(f"worker {turn}")
        scene.retire(f"worker {turn}")

    with ThreadPoolExecutor(2) as pool:
        busy = [pool.submit(work, turn) for turn in range(30)]
        found = [scene.database.read(audit)]
        while not all(one.done() for one in busy):
            found.append(scene.database.read(audit))
        for one in busy:
            one.result()
    assert len(found) > 3
    assert found == [[]] * len(found)
