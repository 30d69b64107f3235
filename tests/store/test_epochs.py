"""Laws in the database: one per snapshot, kept as long as an outcome may ask for it."""

from __future__ import annotations

from typing import Any

from service.learner.memory import Memory
from service.store import epochs, learners, teachers
from service.store.database import Database
from service.teaching import lesson
from tests.builders import GRACE_MS, NAME, append, begin, pass_service_ms, won


def snapshot(database: Database) -> int:
    """The seq of the published snapshot."""
    return database.read(lambda c: learners.snapshots(c, [NAME]))[NAME].seq


def law(database: Database, of: int) -> bytes | None:
    """The law kept for a snapshot."""
    return database.read(lambda c: epochs.laws(c, {(NAME, of)})).get((NAME, of))


def test_a_law_is_kept_for_eachsnapshot_and_serves_its_whole_epoch(migrated_url: str) -> None:
    """Nothing is folded before the epoch is over, by time or by the number of entries."""
    database = Database(migrated_url)
    begin(database)

    def law_of(state: bytes, _: dict[str, Any]) -> bytes:
        return b"law of %d" % Memory.from_bytes(state).total.wins

    def taught() -> None:
        teachers.teach(database, NAME, lesson, 1000, law_of)

    append(database, won(1))
    taught()
    seq = snapshot(database)
    assert law(database, seq) == b"law of 1"
    append(database, won(2))
    assert database.read(learners.behind) == []
    pass_service_ms(database, epochs.EPOCH_MS)
    assert database.read(learners.behind) == [NAME]
    taught()
    assert law(database, seq) == b"law of 1"
    append(database, *(won(number) for number in range(3, 4 + epochs.BIDS_MAX)))
    assert database.read(learners.behind) == [NAME]
    database.close()


def test_laws_are_forgotten_after_grace_but_never_the_current(migrated_url: str) -> None:
    """Whatever its age, the law of the published snapshot stays."""
    database = Database(migrated_url)
    begin(database)
    database.write(lambda c: epochs.keep(c, NAME, 0, b"current"))
    database.write(lambda c: epochs.keep(c, NAME, 7, b"old"))
    pass_service_ms(database, GRACE_MS + epochs.SLACK_MS)
    database.write(epochs.prune)
    assert law(database, 7) == b"old"
    pass_service_ms(database, 1)
    database.write(epochs.prune)
    assert law(database, 7) is None
    assert law(database, 0) == b"current"
    database.close()


def test_a_law_is_of_one_line_item_and_snapshot(migrated_url: str) -> None:
    """Kept twice it is the newer; another's, or none, is none."""
    database = Database(migrated_url)
    begin(database)
    database.write(lambda c: epochs.keep(c, NAME, 3, b"first"))
    database.write(lambda c: epochs.keep(c, NAME, 3, bytes(range(256))))
    assert law(database, 3) == bytes(range(256))
    assert law(database, 4) is None
    assert database.read(lambda c: epochs.laws(c, {("nobody", 3)})) == {}
    database.close()


def test_a_reset_makes_earlier_laws_none(migrated_url: str) -> None:
    """Their bids belong to what was forgotten, so their outcomes must not teach."""
    database = Database(migrated_url)
    begin(database)
    database.write(lambda c: epochs.keep(c, NAME, 5, b"law"))
    database.write(lambda c: epochs.keep(c, NAME, 9, b"law"))
    database.write(lambda c: learners.begin_afresh(c, NAME, 9))
    assert (law(database, 5), law(database, 9)) == (None, b"law")
    database.close()


def test_the_law_of_the_published_snapshot_can_be_ended(migrated_url: str) -> None:
    """Another cap gives the same snapshot another law; earlier ones still answer."""
    database = Database(migrated_url)
    begin(database)
    database.write(lambda c: epochs.keep(c, NAME, 0, b"law"))
    database.write(lambda c: epochs.keep(c, NAME, 9, b"law"))
    database.write(lambda c: epochs.end(c, NAME))
    assert (law(database, 0), law(database, 9)) == (None, b"law")
    database.close()
