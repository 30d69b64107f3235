"""What the watch page is told by a real worker: boards, sheets, charts, and for how long."""

from __future__ import annotations

import pytest

from service.errors import NotFound
from service.feedback import Report
from service.store import charting, keys
from service.watching import ROWS, Watching
from tests.builders import NAME, UNIT, Worker, working

pytestmark = pytest.mark.anyio


def everything(_line_item: str) -> bool:
    """A key without limits."""
    return True


def watching(worker: Worker) -> Watching:
    """The reads of this worker."""
    return Watching(worker.database, worker.threads)


async def won(worker: Worker, count: int = 3) -> None:
    """So many wins, each with a value."""
    for number, bid in enumerate(await worker.bids(count)):
        await worker.report(Report("won", bid.ticket, clearing=900_000))
        await worker.report(Report("value", ref=bid.ref, value=10**7, event_id=f"e{number}"))
    await worker.learn()


async def test_a_board_shows_what_happened(migrated_url: str) -> None:
    """Money, feed and journal of one moment; a second look soon after reads nothing anew."""
    async with working(migrated_url) as worker:
        await worker.create(daily_budget=UNIT // 2)
        await won(worker)
        page = watching(worker)
        board = await page.board(everything, "", 1, all_of_them=True)
        ((one, latest),) = board.rows
        assert (one.id, one.spent_today) == (NAME, 2_700_000)
        assert {"won", "value"} <= set(latest.feed)
        assert [row["action"] for row in board.journal] == ["create"]
        await worker.operator.freeze(NAME, "odd", "tester")
        again = await page.board(everything, "", 1, all_of_them=True)
        assert again.rows[0][0].status == "bids"
        page.forget()
        fresh = await page.board(everything, "", 1, all_of_them=True)
        assert fresh.rows[0][0].status == "frozen"


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_board_has_pages_and_limits(migrated_url: str) -> None:
    """A page too far is the last; a limited key counts, sums and reads only its own."""
    async with working(migrated_url) as worker:
        for number in range(ROWS + 5):
            await worker.create(id=f"garden-{number:02}")
        page = watching(worker)
        last = await page.board(everything, "", 99, all_of_them=True)
        assert (last.page, last.pages, len(last.rows)) == (2, 2, 5)
        mine = await page.board(lambda name: name == "garden-07", "", 1, all_of_them=False)
        assert (mine.alarm.total, mine.matching, len(mine.rows)) == (1, 1, 1)
        assert [row["line_item"] for row in mine.journal] == ["garden-07"]
        some = await page.board(everything, "garden-1", 1, all_of_them=True)
        assert some.matching == 10


async def test_an_edit_is_seen_by_its_version(migrated_url: str) -> None:
    """Only what has changed is parsed again, and it is shown."""
    async with working(migrated_url) as worker:
        await worker.create()
        page = watching(worker)
        await page.board(everything, "", 1, all_of_them=True)
        await worker.operator.patch(NAME, {"name": "Renamed"}, 1, None, None, "tester")
        page.forget()
        board = await page.board(everything, "renamed", 1, all_of_them=True)
        assert board.matching == 1


async def test_a_sheet_and_its_charts(migrated_url: str) -> None:
    """State, stream tail and five charts; the value chart follows the learner step by step."""
    async with working(migrated_url) as worker:
        await worker.create(daily_budget=UNIT // 2)
        await won(worker)
        charting.roll(worker.database)
        page = watching(worker)
        sheet = await page.sheet(NAME)
        assert sheet.state["learner"]["wins"] == 3
        assert sheet.entries[0]["seq"] == sheet.judged.standing.balance["seq"]
        charts = {one.id: one for one in await page.charts(NAME)}
        means = charts["value"].figure["data"][2]["y"]
        assert means[-1] == pytest.approx(10.0)
        assert len(means) > 3
        assert "3 first values" in charts["delays"].says
        assert await page.charts(NAME) == list(charts.values())


async def test_what_is_not_there_is_not_found(migrated_url: str) -> None:
    """Neither a sheet nor charts of nothing."""
    async with working(migrated_url) as worker:
        page = watching(worker)
        with pytest.raises(NotFound):
            await page.sheet("none")
        with pytest.raises(NotFound):
            await page.charts("none")


async def test_a_key_is_known_until_it_ends(migrated_url: str) -> None:
    """By its id, since a session keeps no text of a key."""
    async with working(migrated_url) as worker:
        made, _ = keys.add(worker.database, "anna", ["read"])
        page = watching(worker)
        assert await page.key(made.id) == made
        keys.end(worker.database, made.id)
        assert await page.key(made.id) is None
        assert await page.key("nobody") is None
