"""Previews promise the very bytes that the order leaves, change nothing, and stop in time."""

from __future__ import annotations

from typing import Any

import pytest

from service.feedback import Report
from service.guard.ticket import bid_of
from service.ledger.cancelling import Cancelled, Finder, Named
from service.previewing import begun
from service.store import lessons
from service.winding import Retraction
from tests.builders import NAME, PRICE, UNIT, Worker, working
from tests.test_winding import MEAN, ONE, history, published, retract, rewind

pytestmark = pytest.mark.anyio

METHODS: dict[str, dict[str, Any]] = {
    "mean": {"policy": MEAN},
    "accruing and paced": {
        "policy": {"method": "posterior-quantile"},
        "value": {"arrival": "accrues", "window_ms": 20_000},
        "pacing": {"method": "dual", "profile": None},
        "daily_budget": UNIT // 2,
    },
    "a tree": {"policy": {"method": "exptree-win-only"}},
}
SQLITE = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)


async def ordered(worker: Worker, order: str, bids: list[Any], **more: Any) -> dict[str, Any]:
    """One of the orders that take lessons back."""
    if order == "rewind":
        return await rewind(worker, 7, **more)
    if order == "reset":
        return await worker.operator.reset(NAME, "a try", "tester", **more)
    wishes = {
        "refs": Retraction("both", refs=tuple(str(bid.ref) for bid in bids[2:4])),
        "values": Retraction("value", event_ids=("e1", "e5")),
        "source": Retraction("market", source="north"),
        "span": Retraction("both", until_ms=worker.one("SELECT max(at_ms) FROM stream")),
    }
    return await retract(worker, wishes[order], **more)


@pytest.mark.parametrize(
    ("method", "order"),
    [
        *(("mean", order) for order in ("refs", "values", "source", "span", "rewind", "reset")),
        *(("accruing and paced", order) for order in ("span", "reset")),
        *(("a tree", order) for order in ("refs", "rewind")),
    ],
)
@SQLITE
async def test_the_order_leaves_what_the_preview_promised(
    migrated_url: str, method: str, order: str
) -> None:
    """Byte for byte while both clocks stand still, as both say by their digests."""
    async with working(migrated_url) as worker:
        await worker.create(**METHODS[method])
        bids = await history(worker)
        # A window that closes with the order itself belongs to what the preview must foresee.
        worker.pass_service_ms(30_000)
        # Pacing reads the wall clock of each entry, the order's own among them.
        wall_ms = worker.database.wall_ms()
        worker.database.wall_ms = lambda: wall_ms
        head, state = worker.balance(), published(worker)
        told = await ordered(worker, order, bids, preview=True)
        assert (worker.balance(), published(worker)) == (head, state)
        done = await ordered(worker, order, bids)
        assert told["before"]["digest"] == state.digest == done["before"]["digest"]
        assert told["after"]["digest"] == done["after"]["digest"] == published(worker).digest
        assert told["after"] == {k: v for k, v in done["after"].items() if k != "seq"}
        assert told["after"]["digest"] != told["before"]["digest"]
        assert (told["complete"], told["folded"], told["as_of_seq"]) == (True, True, head["seq"])


async def test_the_promise_holds_on_both_databases(migrated_url: str) -> None:
    """A retract of a source, behind lessons that wait to be learnt."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        bids = await history(worker)
        bid = await worker.bid(source="north")
        await worker.feedback.report([_win(bid)])
        told = await ordered(worker, "source", bids, preview=True)
        done = await ordered(worker, "source", bids)
        assert told["counts"] == done["counts"] == {"won": 5}
        assert told["after"]["digest"] == done["after"]["digest"]


def _win(bid: Any) -> Any:
    return Report("won", bid.ticket, clearing=PRICE)


@SQLITE
async def test_a_preview_sums_what_goes(migrated_url: str) -> None:
    """By part and kind, with first and last moment, values brought and money spent."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        bids = await history(worker)
        told = await ordered(worker, "refs", bids, preview=True)
        assert told["by_part"] == {
            "market": {"won": 2},
            "value": {"won": 2, "value": 2},
        }
        assert (told["value_nanos"], told["cost_nanos"]) == (3 * ONE + 4 * ONE, 2 * (PRICE // 2))
        stamps = "SELECT {}(at_ms) FROM stream WHERE seq IN (7, 8, 9, 10)"
        assert told["first_at_ms"] <= told["last_at_ms"]
        assert told["last_at_ms"] <= worker.one(stamps.format("max")) + 60_000
        half = await ordered(worker, "values", bids, preview=True)
        assert half["by_part"] == {"value": {"value": 2}}
        assert (half["value_nanos"], half["cost_nanos"]) == (2 * ONE + 6 * ONE, 0)
        await retract(worker, Retraction("value", event_ids=("e1",)))
        again = await ordered(worker, "values", bids, preview=True)
        assert again["by_part"] == {"value": {"value": 1}}
        reset = await ordered(worker, "reset", bids, preview=True)
        assert reset["by_part"]["value"] == {"won": 8, "value": 7}
        assert reset["after"]["wins"] == 0 < reset["before"]["wins"]


@pytest.mark.parametrize("order", ["refs", "span", "rewind", "reset"])
@SQLITE
async def test_a_preview_stops_in_time_and_says_so(migrated_url: str, order: str) -> None:
    """Nothing half folded is shown, and what was not counted is not called complete."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        bids = await history(worker)
        worker.operator.winding.preview_s_max = 0.0
        told = await ordered(worker, order, bids, preview=True)
        assert told["complete"] is False
        if order in ("refs", "span"):
            assert told["cancelled"] == 0  # Found so far; `complete` says that it is not all.
        elif order == "reset":
            assert told["after"]["wins"] == 0  # Nothing was left to fold; only the sums are short.
        else:
            assert (told["after"], told["folded"]) == (None, False)
            assert told["why_not_folded"] == "too_large"


@SQLITE
async def test_a_span_is_read_from_where_it_begins(migrated_url: str) -> None:
    """What lies before it is not read, and what is found is the same."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        bids = await history(worker)
        worker.run("UPDATE stream SET at_ms = 1000 * seq")

        def look(named: Named) -> tuple[int, list[int], list[int]]:
            def work(connection: Any) -> tuple[int, list[int], list[int]]:
                whole, short = (
                    Finder(named, Cancelled()),
                    begun(connection, NAME, named, Cancelled()),
                )
                start = short.read_until
                for finder in (whole, short):
                    lessons.find(connection, NAME, finder)
                return start, whole.seqs, short.seqs

            return worker.database.read(work)

        start, whole, short = look(Named("both", from_ms=9000, until_ms=12_000))
        assert (start, short) == (8, whole) == (8, [9, 10, 11])
        refs = frozenset(_bid(one) for one in bids[3:5])
        start, whole, short = look(Named("both", bids=refs))
        assert short == whole
        assert start == whole[0] - 1 > 0
        # A value may lie inside the span, and the outcome that names its source before it.
        start, whole, short = look(Named("both", source="north", from_ms=9000))
        assert (start, short) == (0, whole)


def _bid(answer: Any) -> bytes:
    return bid_of(str(answer.ref))


@SQLITE
async def test_a_rewind_counts_what_still_teaches(migrated_url: str) -> None:
    """Kind by kind; what is cancelled already, whole or in part, once or twice, is told apart."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        bids = await history(worker)
        assert (await rewind(worker, 6, preview=True))["counts"] == {"won": 6, "value": 6}
        await retract(worker, Retraction("both", refs=(str(bids[6].ref),)))
        await retract(worker, Retraction("market", source="north"))
        told = await rewind(worker, 6, preview=True)
        assert told["counts"] == {"won": 5, "value": 5}
        assert told["by_part"]["market"] == {"won": 2}
        await rewind(worker, 10)
        assert (await rewind(worker, 6, preview=True))["counts"] == {"won": 2, "value": 2}


@SQLITE
async def test_a_reset_says_what_was_known_before_and_after(migrated_url: str) -> None:
    """Once per key, published when it answers."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        await history(worker)
        seq = worker.balance()["seq"]
        first = await worker.operator.reset(NAME, "a try", "tester", "k")
        again = await worker.operator.reset(NAME, "a try", "tester", "k")
        assert first == again
        assert (first["before"]["seq"], first["after"]["seq"]) == (seq, seq + 1)
        assert (first["before"]["wins"], first["after"]["wins"], first["published"]) == (8, 0, True)
        assert worker.balance()["seq"] == seq + 1
