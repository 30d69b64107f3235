"""Tripwires over a real database: counted, judged, frozen, thawed, cleared, told."""

from __future__ import annotations

import json
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import pytest

from service.feedback import Report
from service.ledger.entries import Entry
from service.store import outbox, tripwires
from service.tripwires.counts import NAMES, Counts
from service.tripwiring import Tending, Widths
from tests.builders import NAME, UNIT, Worker, append, valued, won, working

pytestmark = pytest.mark.anyio

SECOND = 1000
QUIET_MS = 60_000
WINDOW_MS = 4 * SECOND
FREEZE = {"action": "freeze", "window_ms": WINDOW_MS}
RULES = {"zero_values": FREEZE, "value_size": FREEZE}
VALUE = 20_000_000
WINS = 8
FAR = 1_800_000_000_000


class Night:
    """A line item in seconds: entries are appended at moments of our own choice."""

    def __init__(self, worker: Worker) -> None:
        self.worker, self.now, self.number = worker, FAR, 0
        worker.database.wall_ms = lambda: self.now
        self.tending = Tending(worker.database, Widths(SECOND), QUIET_MS)

    def second(self, *, times: int = 1, zeros: bool = True) -> None:
        """One second of nine bids and eight wins, two of them with a value."""
        self.now += SECOND
        entries = [Entry("tick", {"rounds": 1, "under_floor": 0})]
        for at in range(WINS):
            self.number += 1
            entries.append(won(self.number))
            if at < 2 or zeros:
                entries.append(valued(self.number, times * VALUE if at < 2 else 0))
        append(self.worker.database, *entries)

    def seconds(self, count: int, **how: Any) -> None:
        """So many, each looked at."""
        for _ in range(count):
            self.second(**how)
            self.look()

    def look(self) -> None:
        """What the clerk does every few seconds."""
        for standing in self.tending.due(""):
            self.tending.look(standing)

    @property
    def findings(self) -> list[tuple[str, bool]]:
        """Every finding and whether it is over, oldest first."""
        rules = self.worker.column("SELECT rule FROM tripwire_finding ORDER BY number")
        over = self.worker.column("SELECT cleared_ms FROM tripwire_finding ORDER BY number")
        return [(rule, at is not None) for rule, at in zip(rules, over, strict=True)]

    @property
    def sources(self) -> list[str]:
        """What freezes it."""
        return self.worker.column("SELECT source FROM freezing")

    def news(self) -> list[str]:
        """Kinds of news that wait, in order."""
        return self.worker.column("SELECT kind FROM outbox ORDER BY number")


async def begun(worker: Worker, **changes: Any) -> Night:
    """A line item with half a minute of usual seconds behind it."""
    await worker.create(**{"tripwires": RULES, "value": {"ceiling": UNIT}, **changes})
    night = Night(worker)
    night.seconds(30)
    return night


async def test_a_finding_freezes_says_why_and_is_told(migrated_url: str) -> None:
    """Freeze, journal and news in one transaction, once, and every worker hears of it."""
    async with working(migrated_url) as worker:
        night = await begun(worker)
        assert (night.findings, night.news()) == ([], [])
        night.seconds(6, times=5, zeros=False)
        assert {rule for rule, _ in night.findings} == {"zero_values", "value_size"}
        assert night.sources == ["tripwire"]
        await worker.upkeep.follow()
        assert (await worker.bid()).reason == "frozen"
        (freeze,) = (await worker.operator.get(NAME)).freezes
        assert (freeze["actor"], freeze["reason"].split(":")[0]) in {
            ("bidkeel", "zero_values"), ("bidkeel", "value_size"),
        }  # fmt: skip
        actions = worker.column("SELECT action FROM journal ORDER BY number")
        assert actions == ["create", "freeze", "warn"]
        (told,) = worker.column("SELECT detail FROM journal WHERE action = 'freeze'")
        assert json.loads(told)["finding"]["saw"] in freeze["reason"]
        assert sorted(night.news()) == ["finding", "finding", "freeze"]
        state = await worker.operator.state(NAME)
        assert state["tripwires"]["armed"]["zero_values"] == "freeze"
        assert len(state["tripwires"]["findings"]) == 2


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_what_a_person_thawed_is_not_frozen_again(migrated_url: str) -> None:
    """Not while it stays; it is seen again and again and stops nothing."""
    async with working(migrated_url) as worker:
        night = await begun(worker)
        night.seconds(6, times=5, zeros=False)
        await worker.operator.thaw(NAME, "we know", "tester")
        assert night.news()[-1] == "thaw"
        night.seconds(6, times=5, zeros=False)
        assert night.sources == []
        assert worker.column("SELECT action FROM journal").count("freeze") == 1


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_quiet_period_ends(migrated_url: str) -> None:
    """A fault that stays for longer freezes again, and says so again."""
    async with working(migrated_url) as worker:
        await worker.create(tripwires={"unfunded": {"action": "freeze"}})
        night = Night(worker)
        worker.run("UPDATE balance SET unfunded = 7")
        night.look()
        assert night.sources == ["tripwire"]
        await worker.operator.thaw(NAME, "we know", "tester")
        for _ in range(3):
            night.now += 2 * SECOND
            night.look()
        assert night.sources == []
        night.now += QUIET_MS
        night.look()
        assert night.sources == ["tripwire"]
        assert worker.column("SELECT action FROM journal").count("freeze") == 2
        worker.run("UPDATE balance SET unfunded = 0")
        night.now += 2 * SECOND
        night.look()
        assert night.findings == [("unfunded", True)]
        assert night.news()[-1] == "cleared"


async def test_a_finding_clears_when_bids_have_shown_it_for_a_window(migrated_url: str) -> None:
    """Not while it is frozen, for then nothing shows; afterwards a new one may be raised."""
    async with working(migrated_url) as worker:
        night = await begun(worker)
        night.seconds(6, zeros=False)
        night.now += 60 * SECOND
        night.look()
        assert night.findings == [("zero_values", False)]
        await worker.operator.thaw(NAME, "mended", "tester")
        night.seconds(20)
        assert night.findings == [("zero_values", True)]
        assert night.sources == []
        # A fault that is still in its history makes a line item less sure of what is usual.
        for _ in range(100):
            night.second()
        night.seconds(6, zeros=False)
        assert night.findings == [("zero_values", True), ("zero_values", False)]
        assert night.sources == ["tripwire"]


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_warning_stops_nothing(migrated_url: str) -> None:
    """It stands in the journal and in the news, and bids go on; off, it is not even that."""
    warn = {**FREEZE, "action": "warn"}
    async with working(migrated_url) as worker:
        night = await begun(worker, tripwires={"zero_values": warn})
        night.seconds(6, zeros=False)
        assert (night.sources, night.news()) == ([], ["finding"])
        assert worker.column("SELECT action FROM journal ORDER BY number") == ["create", "warn"]
        changed = {"tripwires": {"zero_values": {"action": "off"}}}
        await worker.operator.patch(NAME, changed, 1, None, "a try", "tester")
        night.seconds(1)
        assert night.findings == [("zero_values", True)]


async def test_two_clerks_find_once(migrated_url: str) -> None:
    """Both see the same standing at once; entries are counted once and the finding raised once."""
    async with working(migrated_url) as worker:
        night = await begun(worker)
        for _ in range(6):
            night.second(times=5, zeros=False)
        (standing,) = night.tending.due("")
        both = [threading.Thread(target=night.tending.look, args=(standing,)) for _ in range(2)]
        for thread in both:
            thread.start()
        for thread in both:
            thread.join()
        assert sorted(night.findings) == [("value_size", False), ("zero_values", False)]
        assert worker.column("SELECT action FROM journal").count("freeze") == 1
        assert night.news().count("finding") == 2
        assert sums(worker) == expected(36, zeros=30)


async def test_buckets_are_the_sums_of_the_stream(migrated_url: str) -> None:
    """Whatever the pages; each width holds the same, and what is counted is not counted again."""
    async with working(migrated_url) as worker:
        night = await begun(worker)
        for _ in range(5):
            night.now += SECOND
            night.look()
        for width in (0, 1, 2):
            assert sums(worker, width) == expected(30, zeros=30)
        assert worker.one("SELECT count(*) FROM tripwire_bucket WHERE width = 0") == 30
        with pages_of(7):
            worker.run("DELETE FROM tripwire_mark")
            worker.run("DELETE FROM tripwire_bucket")
            night.look()
            assert sums(worker) != expected(30, zeros=30)
            for _ in range(5):
                night.look()
        assert sums(worker) == expected(30, zeros=30)


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_old_sums_are_forgotten(migrated_url: str) -> None:
    """Days after their bucket, width by width."""
    async with working(migrated_url) as worker:
        night = await begun(worker)
        day = Widths(SECOND).day_ms
        night.now += 3 * day
        assert night.tending.prune(tripwires.MINUTES, 2) == 30
        assert night.tending.prune(tripwires.MINUTES, 2) == 0
        assert night.tending.prune(tripwires.HOURS, 40) == 0


async def test_refused_reports_are_counted_by_line_item(migrated_url: str) -> None:
    """By what its ticket names, in memory until the next look; forged tickets name nobody."""
    async with working(migrated_url) as worker:
        await worker.create()
        night = Night(worker)
        (answer,) = await worker.bids(1)
        lost = Report("lost", answer.ticket)
        unpriced = Report("won", answer.ticket)
        value = Report("value", answer.ticket, value=1, event_id="a")
        receipts = await worker.report(lost, unpriced, value, Report("lost", "forged"))
        assert [one.status for one in receipts] == ["recorded", "refused", "refused", "refused"]
        await worker.feedback.keep_refusals()
        await worker.feedback.keep_refusals()
        night.look()
        assert sums(worker).refused == 2
        night.now += 2 * SECOND
        night.look()
        assert sums(worker).refused == 2


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_damaged_entry_stops_no_look(migrated_url: str) -> None:
    """It counts for nothing, and all beside it counts."""
    async with working(migrated_url) as worker:
        night = await begun(worker)
        worker.run("UPDATE stream SET body = 'x' WHERE kind = 'won' AND seq = 3")
        worker.run("DELETE FROM tripwire_mark")
        worker.run("DELETE FROM tripwire_bucket")
        night.look()
        assert sums(worker).wins == 30 * WINS - 1


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_setting_is_tried_on_what_is_recorded(migrated_url: str) -> None:
    """It says when it would have fired and frozen, and leaves no trace."""
    async with working(migrated_url) as worker:
        night = await begun(worker, tripwires={"zero_values": {"action": "off"}})
        night.seconds(6, zeros=False)
        night.seconds(5)
        worker.operator.tripwires._widths = Widths(SECOND)
        before = worker.column("SELECT count(*) FROM tripwire_finding"), night.news()
        now = await worker.operator.tripwires.preview(NAME, {})
        assert now["rules"]["zero_values"]["fired"] == 0
        told = await worker.operator.tripwires.preview(NAME, {"zero_values": FREEZE})
        rule = told["rules"]["zero_values"]
        assert (rule["fired"], told["would_freeze_in_all"]) == (1, 1)
        assert told["would_freeze"][0]["rule"] == "zero_values"
        assert "are zero" in rule["episodes"][0]["saw"]
        assert rule["per_week"] > 0
        assert (worker.column("SELECT count(*) FROM tripwire_finding"), night.news()) == before
        assert night.sources == []


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_whoever_asks_reads_rules_findings_and_runbooks(migrated_url: str) -> None:
    """Open ones first, those that are over apart, and how the news of them fares."""
    async with working(migrated_url) as worker:
        night = await begun(worker)
        night.seconds(6, zeros=False)
        shown = await worker.operator.tripwires.shown(NAME)
        (finding,) = shown["open"]
        assert finding["runbook"]["do"].startswith("Freeze")
        assert (shown["over"], shown["news"]["waiting"]) == ([], 2)
        assert shown["rules"]["zero_values"]["window_s"] == 4
        first = worker.database.read(lambda c: outbox.due(c, night.now))[0]
        worker.database.write(lambda c: outbox.failed(c, first.number, "status 500", None))
        news = (await worker.operator.tripwires.shown(NAME))["news"]
        assert (news["given_up"], news["last_error"]) == (1, "status 500")


def test_the_store_and_the_rules_name_the_same_sums() -> None:
    """Columns are filled by position, so their order is that of the rules."""
    assert tripwires.COUNTS == NAMES


def sums(worker: Worker, width: int = 0) -> Counts:
    """All buckets of one width together."""
    columns = ", ".join(f"coalesce(sum({name}), 0)" for name in NAMES)
    statement = f"SELECT {columns} FROM tripwire_bucket WHERE width = {width}"  # noqa: S608
    (row,) = worker.database.read(lambda c: c.exec_driver_sql(statement).all())
    return Counts(*(int(value) for value in row))


def expected(seconds: int, zeros: int) -> Counts:
    """What so many seconds of ours sum up to, leaving out the logarithms of values."""
    wins, worth = WINS * seconds, 2 * seconds
    known = sums_of_logs(seconds, zeros)
    return Counts(
        bids=(WINS + 1) * seconds, wins=wins, paid=wins * 1_000_000, words=worth + 6 * zeros,
        zeros=6 * zeros, logs=known[0], log_squares=known[1],
    )  # fmt: skip


def sums_of_logs(seconds: int, usual: int) -> tuple[int, int]:
    """Two values a second, of which those beyond the usual seconds were five times as large."""
    logs = [16811] * (2 * usual) + [18421] * (2 * (seconds - usual))
    return sum(logs), sum(log * log for log in logs)


@contextmanager
def pages_of(rows: int) -> Iterator[None]:
    """Let a look read so few entries at once."""
    before, tripwires.ENTRIES_MAX = tripwires.ENTRIES_MAX, rows
    try:
        yield
    finally:
        tripwires.ENTRIES_MAX = before
