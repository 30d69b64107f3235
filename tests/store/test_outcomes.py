"""A group of outcomes is one transaction: each row has its answer, and all of it stands at once."""

from __future__ import annotations

import json
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from typing import Any

import pytest
from sqlalchemy import text

from service.ledger.settle import Outcome
from service.ledger.values import Value
from service.store import changes, freezes, journal, learners
from service.store.audit import audit
from service.store.bookings import Booked, Booking
from service.store.database import Database, Reading
from service.store.outcomes import book, find_wins
from tests.builders import NAME, begin
from tests.money.scene import GRACE_MS, LEASE_MS, Bid, Scene

CEILING = 100_000_000  # Of the flat line item, in nanos.


@pytest.fixture(name="scene")
def _scene(migrated_url: str) -> Iterator[Scene]:
    """A line item with money in one worker's hand."""
    with closing(Database(migrated_url, pool_size=6)) as database:
        scene = Scene(database, budget=100)
        scene.lease()
        yield scene
        assert database.read(audit) == []


def value(bid: Bid | bytes, event: str = "a", amount: int = 5, **more: Any) -> Booking:
    """The booking of a value of a bid."""
    return Booking(NAME, Value(bid if isinstance(bid, bytes) else bid.id, event, amount, **more))


def entries(scene: Scene, name: str = NAME) -> list[tuple[str, dict[str, Any]]]:
    """Kind and body of every entry after the lease, in order."""
    statement = text("SELECT kind, body FROM stream WHERE line_item = :id ORDER BY seq")

    def read(connection: Reading) -> list[tuple[str, dict[str, Any]]]:
        found = connection.execute(statement, {"id": name})
        return [(row.kind, json.loads(row.body)) for row in found]

    return [entry for entry in scene.database.read(read) if entry[0] not in ("create", "lease")]


def kinds(scene: Scene) -> list[str]:
    """The kinds of those entries."""
    return [kind for kind, _ in entries(scene)]


def late_bids(scene: Scene, count: int) -> list[Bid]:
    """Bids whose grace is over and whose money is leased again."""
    bids = [scene.placed(5) for _ in range(count)]
    scene.crash()
    scene.pass_ms(LEASE_MS + GRACE_MS)
    scene.close()
    scene.lease_everything()
    return bids


def test_each_row_has_its_answer_in_order(scene: Scene) -> None:
    """Decided one after the other, so a later row sees what an earlier one did."""
    won, lost = scene.placed(5), scene.placed(5)
    win, loss = scene.told(won, "won", 4), scene.told(lost, "lost", 9)
    group = [value(won), win, win, scene.told(won, "won", 3), loss, value(lost), value(won, "b")]
    answers = book(scene.database, group)
    assert answers == [
        *(Booked("parked"), Booked("recorded"), Booked("duplicate"), Booked("conflict")),
        *(Booked("recorded"), Booked("refused", "not_won"), Booked("conflict")),
    ]
    assert kinds(scene) == ["parked", "won", "value", "conflict", "lost", "conflict"]


def test_no_row_is_no_work(scene: Scene) -> None:
    """An empty group has no answers and leaves no trace."""
    assert book(scene.database, []) == []
    assert kinds(scene) == []


def test_a_line_item_that_is_not_there_is_refused(scene: Scene) -> None:
    """Its ticket is sound, so the database is older than it; the other rows stand."""
    bid = scene.placed(5)
    gone = Booking("nobody", Outcome("lost", b"n" * 16, 0, 5, "default"), b"n" * 16)
    lost = Booking("nobody", Value(b"n" * 16, "a", 5))
    answers = book(scene.database, [gone, scene.told(bid, "won", 4), lost])
    refused = Booked("refused", "no_such_line_item")
    assert answers == [refused, Booked("recorded"), refused]


@pytest.mark.parametrize(
    ("amount", "answer"),
    [
        (CEILING, Booked("recorded")),
        (CEILING + 1, Booked("recorded", clipped=True)),
        (100 * CEILING, Booked("recorded", clipped=True)),
        (100 * CEILING + 1, Booked("refused", "value_out_of_range")),
    ],
)
def test_a_value_above_the_ceiling_is_kept_in_full(
    scene: Scene, amount: int, answer: Booked
) -> None:
    """It says that it will be clipped; a hundred ceilings are an error of unit."""
    bid = scene.placed(5)
    assert book(scene.database, [scene.told(bid, "won", 4), value(bid, "a", amount)])[1] == answer
    kept = [body["amount"] for kind, body in entries(scene) if kind == "value"]
    assert kept == ([amount] if answer.status == "recorded" else [])


@pytest.mark.parametrize("kind", ["won", "billed"])
def test_a_parked_value_is_taught_with_its_win_or_bill(scene: Scene, kind: str) -> None:
    """In the same transaction, once, and whichever of the two comes first."""
    bid = scene.placed(5)
    scene.value(bid, "a", 7)
    for told in (kind, "won", "billed"):
        scene.tell(bid, told, 4)
    assert kinds(scene)[:3] == ["parked", kind, "value"]
    assert kinds(scene).count("value") == 1
    assert (
        entries(scene)[2][1] | {"amount": 7, "event_id": "a", "was": None} == entries(scene)[2][1]
    )


def test_an_entry_names_its_slice_and_day(scene: Scene) -> None:
    """So the stream can be replayed alone; a ticket from elsewhere has a day but no slice."""
    here, foreign = scene.placed(5), scene.placed(5)
    scene.tell(here, "won", 4)
    assert scene.tell(foreign, "won", 4, here=False) == "late"
    places = [(body["slice"], body["day"], body["late"]) for _, body in entries(scene)]
    assert places == [(here.slice.hex(), here.day, False), (None, here.day, True)]
    assert scene.day()["spent"] == 8


def test_line_items_of_one_group_keep_their_books_apart(scene: Scene) -> None:
    """Each has its own seq and its own money."""
    begin(scene.database, id="orchard", budget=50)
    bid = scene.placed(5)
    other = Booking("orchard", Outcome("won", b"o" * 16, 0, 5, "default", 3), None)
    book(scene.database, [other, scene.told(bid, "won", 4)])
    spent = text("SELECT line_item, spent, seq FROM balance ORDER BY line_item")
    rows = scene.database.read(lambda c: [tuple(row) for row in c.execute(spent)])
    assert rows == [(NAME, 4, 3), ("orchard", 3, 2)]


def test_a_contradiction_is_kept_beside_what_stands(scene: Scene) -> None:
    """The first content of a slot is the one that counts, and both can be read."""
    bid = scene.placed(5)
    for price in (4, 3, 3):
        scene.tell(bid, "won", price)
    said = [(kind, body["price"]) for kind, body in entries(scene)]
    assert said == [("won", 4), ("conflict", 3)]
    assert scene.balance()["spent"] == 4


def test_unfunded_cost_freezes_once_and_says_so(scene: Scene) -> None:
    """One freeze, one row in the journal and one change, however many rows or groups follow."""
    bids = late_bids(scene, 3)
    before = scene.database.read(changes.latest)
    book(scene.database, [scene.told(bid, "won", 4) for bid in bids[:2]])
    book(scene.database, [scene.told(bids[2], "won", 4)])

    assert scene.balance()["unfunded"] == 12
    (freeze,) = scene.database.read(lambda c: freezes.on(c, [NAME]))[NAME]
    assert (freeze["source"], freeze["actor"]) == ("tripwire", "bidkeel")
    assert freeze["reason"] == "0.000000008 EUR found no free money"
    (row,) = scene.database.read(lambda c: journal.newest(c, NAME, 9))
    assert (row["reason"], row["detail"]) == ("unfunded", {"unfunded_nanos": 8})
    news = scene.database.read(lambda c: changes.since(c, before))
    assert [(kind, name) for _, kind, name in news] == [("freeze", NAME)]


def test_a_cost_that_finds_money_freezes_nothing(scene: Scene) -> None:
    """A late win alone is no reason to stop."""
    bid = scene.placed(5)
    scene.crash()
    scene.pass_ms(LEASE_MS + GRACE_MS)
    scene.close()
    assert scene.tell(bid, "won", 4) == "late"
    assert scene.database.read(lambda c: freezes.on(c, [NAME]))[NAME] == []


def test_a_value_of_a_win_before_the_reset_says_so(scene: Scene) -> None:
    """The learner began afresh between the two, and must not learn half of a bid."""
    old, new = scene.placed(5), scene.placed(5)
    scene.tell(old, "won", 4)
    seq = scene.balance()["seq"]
    scene.database.write(lambda c: learners.begin_afresh(c, NAME, seq))
    scene.tell(new, "won", 4)
    for bid in (old, new):
        scene.value(bid, "a", 7)
    marks = [body.get("before_reset", False) for kind, body in entries(scene) if kind == "value"]
    assert marks == [True, False]


def test_the_line_item_of_a_settled_bid_is_found(scene: Scene) -> None:
    """By its result or its bill; a bid that is silent, or only has a parked value, is not."""
    won, billed, parked, silent = (scene.placed(5) for _ in range(4))
    scene.tell(won, "won", 4)
    scene.tell(billed, "billed", 4)
    scene.value(parked, "a", 7)
    asked = [bid.id for bid in (won, billed, parked, silent, won)]
    found = scene.database.read(lambda c: find_wins(c, asked))
    assert found == {won.id: NAME, billed.id: NAME}
    assert scene.database.read(lambda c: find_wins(c, [])) == {}


def test_a_group_sent_by_four_at_once_is_booked_once(scene: Scene) -> None:
    """One records it, and for the others all of it is there already."""
    group = [scene.told(scene.placed(5), "won", 4) for _ in range(3)]
    with ThreadPoolExecutor(4) as pool:
        answers = list(pool.map(lambda _: book(scene.database, group), range(4)))
    assert sorted(answer[0].status for answer in answers) == [*["duplicate"] * 3, "recorded"]
    assert all(len({booked.status for booked in answer}) == 1 for answer in answers)
    assert scene.balance()["spent"] == 12
