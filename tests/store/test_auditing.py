"""The audit that goes on from its last seq finds what the one from zero finds, as it happens."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import closing

import pytest
from sqlalchemy import text

from service.store.audit import audit
from service.store.auditing import audit_on, prune_slices, standings
from service.store.database import Database
from tests.money.scene import BILLING_GRACE_MS, GRACE_MS, LEASE_MS, NAME, Bid, Scene
from tests.store.test_audit import ALTERATIONS, alter

THROUGH = "V3", "V4", "V5", "V7"
DAY_MS = 86_400_000


@pytest.fixture(name="scene")
def _scene(migrated_url: str) -> Iterator[Scene]:
    """The first half of a story is audited already: a win that owes, and money in hand."""
    with closing(Database(migrated_url, pool_size=4)) as database:
        scene = Scene(database, "billed", daily_budget=300)
        scene.lease()
        first, second, third, _ = (scene.placed(8) for _ in range(4))
        scene.tell(first, "won", 6)
        assert through(scene) == []
        for bid, kind, price in ((first, "billed", 11), (second, "won", 5)):
            scene.tell(bid, kind, price)
        scene.tell(third, "lost", 9)
        yield scene


def through(scene: Scene, entries_max: int = 2) -> list[str]:
    """Audit to the end in small pieces; the promises that are found broken."""
    while True:
        (piece,), _ = audit_on(scene.database, [NAME], entries_max)
        if piece.whole or piece.found:
            return sorted({finding.check.split()[0] for finding in piece.found})


def audited(scene: Scene) -> int:
    """The last audited seq."""
    return int(scene.one("SELECT seq FROM audited"))


# The lease was passed by an earlier audit: its row altered is for the command that reads it all.
LATER = [(what, codes) for what, codes in ALTERATIONS if "kind = 'lease'" not in what]


@pytest.mark.parametrize(("statement", "promises"), LATER)
def test_what_was_altered_after_the_last_audit_is_found(
    scene: Scene, statement: str, promises: str
) -> None:
    """Each alteration that concerns a stream freezes the line item, and no other does."""
    alter(scene.database, statement)
    expected = [code for code in promises.split() if code in THROUGH]
    found = through(scene)
    if "V4" in expected or "V5" in expected:
        # A stream that is not whole is not replayed.
        assert set(found) <= {"V4", "V5"}
    else:
        assert found == expected
    assert bool(found) == bool(expected)
    frozen = "SELECT count(*) FROM freezing WHERE source = 'audit'"
    assert scene.one(frozen) == int(bool(expected))


def test_it_goes_on_where_it_ended(scene: Scene) -> None:
    """What is new is read, what was passed is not: history altered before it is the command's."""
    before = audited(scene)
    assert through(scene) == []
    assert audited(scene) == scene.one("SELECT seq FROM balance") > before
    alter(scene.database, "UPDATE stream SET cost = 1 WHERE kind = 'lease'")
    assert through(scene) == []
    assert [finding.check[:2] for finding in scene.database.read(audit)] == ["V3"]


def test_the_difference_is_in_the_journal_once(scene: Scene) -> None:
    """The first finding freezes and is noted; the same again adds nothing until a thaw."""
    alter(scene.database, "UPDATE balance SET spent = spent + 5, held = held - 5")
    for _ in range(3):
        assert through(scene) == ["V3", "V7"]
    detail = json.loads(scene.one("SELECT detail FROM journal WHERE action = 'freeze'"))
    assert {(f["check"][:2], f["off"]) for f in detail["findings"]} == {
        *(("V3", 5), ("V7", 5), ("V7", -5)),
    }
    scene.database.write(lambda c: c.execute(text("DELETE FROM freezing")))
    alter_back = text("UPDATE balance SET spent = spent - 5, held = held + 5")
    scene.database.write(lambda c: c.execute(alter_back))
    assert through(scene) == []


def test_two_clerks_keep_a_piece_once(scene: Scene) -> None:
    """Whoever comes second finds nothing to do, and sums are not counted twice."""
    with closing(Database(scene.database.engine.url.render_as_string(False))) as other:
        while True:
            audit_on(other, [NAME], 1)
            (piece,), _ = audit_on(scene.database, [NAME], 1)
            if piece.whole:
                break
    assert through(scene) == []
    assert scene.one("SELECT cost FROM audited") == scene.one("SELECT sum(cost) FROM stream")


def test_what_has_not_moved_stands_as_it_did(scene: Scene) -> None:
    """Only a line item that changed is looked at again, even one that was changed by hand."""
    before = scene.database.read(standings)
    assert scene.database.read(standings) == before
    for change in ("balance SET disputed = disputed + 1", "local_day SET over_spent = 1"):
        scene.database.write(lambda c, change=change: c.execute(text(f"UPDATE {change}")))  # type: ignore[misc]
        after = scene.database.read(standings)
        assert after != before
        before = after


def closed_and_late(scene: Scene) -> Bid:
    """A slice that is closed for good, with a bid of it that nobody has spoken of."""
    silent = scene.placed(8)
    scene.retire()
    scene.pass_ms(LEASE_MS + GRACE_MS)
    scene.close()
    scene.pass_ms(BILLING_GRACE_MS)
    scene.close()
    return silent


def slices(scene: Scene) -> int:
    """How many rows of slices there are."""
    return int(scene.one("SELECT count(*) FROM slice"))


def test_a_closed_slice_goes_once_it_is_audited_and_old(scene: Scene) -> None:
    """Not before the audit has passed its closing, nor before its time; never an open one."""
    silent = closed_and_late(scene)
    scene.lease("two")

    def prune(keep_ms: int) -> int:
        return scene.database.write(lambda c: prune_slices(c, keep_ms))

    scene.pass_ms(1000)
    assert (prune(0), slices(scene)) == (0, 2)
    assert through(scene) == []
    assert (prune(DAY_MS), slices(scene)) == (0, 2)
    assert (prune(0), slices(scene)) == (1, 1)
    # A win out of it is late, as it was before, and every audit agrees.
    scene.tell(silent, "won", 8)
    scene.tell(silent, "billed", 8)
    assert through(scene) == []
    assert scene.database.read(audit) == []


def test_a_slice_closed_while_the_audit_was_behind_stays(scene: Scene) -> None:
    """Its lease is audited and its closing is not: it is open in the audited books."""
    assert through(scene) == []
    closed_and_late(scene)
    assert scene.database.write(lambda c: prune_slices(c, 0)) == 0
    assert through(scene) == []


def test_a_stream_that_ends_early_is_found(scene: Scene) -> None:
    """The last entries are gone and the balance still counts them."""
    last = "(SELECT max(seq) FROM stream)"
    alter(scene.database, f"DELETE FROM stream WHERE seq = {last}")  # noqa: S608
    assert through(scene, 100) == through(scene, 1) == ["V5"]
