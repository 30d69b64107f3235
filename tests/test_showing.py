"""What people see of a line item: price and what set it, certainty, money, freezes, feed."""

from __future__ import annotations

from typing import Any

import pytest
from sqlalchemy import text

from service.api.answers import plain
from service.errors import NotFound
from service.feedback import Report
from service.ledger.entries import Entry
from tests.builders import (
    CAP,
    GRACE_MS,
    LEASE_S,
    NAME,
    PRICE,
    UNIT,
    Worker,
    append,
    begin,
    valued,
    won,
    working,
)

pytestmark = pytest.mark.anyio

MEAN = {"method": "mean"}
CEILING = 100_000_000
TYPICAL = 20_000_000


async def state(worker: Worker) -> dict[str, Any]:
    """The state now."""
    return await worker.operator.state(NAME)


async def test_a_new_line_item_shows_its_price_and_its_free_money(migrated_url: str) -> None:
    """Before the first bid everything is there, and nothing is pretended to be known."""
    async with working(migrated_url) as worker:
        await worker.create()
        seen = await state(worker)
        assert seen["bid"] == {
            **{"method": "flat", "snapshot": 0, "price_cpm_nanos": PRICE, "set_by": "value"},
            "pass": None,
        }
        assert (seen["line_item"], seen["version"], seen["currency"]) == (NAME, 1, "EUR")
        assert (seen["money"]["budget_nanos"], seen["money"]["free_nanos"]) == (UNIT, UNIT)
        assert (seen["money"]["slices"], seen["day"], seen["freezes"]) == ([], None, [])
        assert seen["feed"] == {"last_ms": {}, "quarantined": 0}
        learner, certainty = seen["learner"], seen["certainty"]
        assert (learner["rounds"], learner["win_rate"]) == (0, None)
        assert learner["mean_price_cpm_nanos"] is certainty["mean_nanos"] is None
        assert (certainty["low_nanos"], certainty["high_nanos"]) == (0, CEILING)
        assert seen["learnability"].startswith("this budget buys about 50 conversions")


async def test_the_price_shown_is_the_price_bid(migrated_url: str) -> None:
    """And so is what set it: the value, the cap, or a reason to pass."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        for worth, set_by in ((0, "value"), (CEILING, "cap")):
            append(worker.database, *_wins(worth, first=worth))
            await worker.learn()
            answer, seen = await worker.bid(), (await state(worker))["bid"]
            assert (seen["price_cpm_nanos"], seen["set_by"]) == (answer.bid, set_by)
            assert (seen["snapshot"], seen["method"]) == (answer.snapshot, answer.method)
        append(worker.database, *(won(number) for number in range(10**6, 10**6 + 90)))
        await worker.learn()
        answer, seen = await worker.bid(), (await state(worker))["bid"]
        assert seen["price_cpm_nanos"] is answer.bid is None
        assert seen["pass"] == answer.reason == "no_value"


def _wins(worth: int, first: int) -> list[Entry]:
    numbers = range(first + 1, first + 11)
    return [entry for n in numbers for entry in (won(n), valued(n, worth))]


async def test_certainty_grows_with_what_is_known(migrated_url: str) -> None:
    """The interval holds the mean and narrows, and says in words what it is."""
    async with working(migrated_url) as worker:
        begin(worker.database, policy=MEAN)
        widths = []
        for part in range(3):
            numbers = range(100 * part, 100 * part + 100)
            append(worker.database, *(won(n, 500_000) for n in numbers))
            append(worker.database, *(valued(n, TYPICAL * (n % 2)) for n in numbers))
            await worker.clerk.teach()
            seen = (await state(worker))["certainty"]
            assert seen["low_nanos"] < seen["mean_nanos"] == TYPICAL // 2 < seen["high_nanos"]
            widths.append(seen["high_nanos"] - seen["low_nanos"])
        assert widths == sorted(widths, reverse=True)
        assert (seen["wins"], seen["known"], seen["converted"]) == (300, 300, 150)
        assert seen["interval"]
        learner = (await state(worker))["learner"]
        assert (learner["mean_price_cpm_nanos"], learner["win_rate"]) == (500_000, 1.0)


async def test_money_is_shown_where_it_is(migrated_url: str) -> None:
    """Spent, held, free, disputed, and what lies in which slices; the day too."""
    async with working(migrated_url) as worker:
        await worker.create(daily_budget=UNIT // 2, spend_on="billed")
        one, two, _ = await worker.bids(3)
        await worker.report(Report("won", one.ticket, clearing=PRICE // 2))
        await worker.report(Report("billed", two.ticket, clearing=PRICE + 5))
        seen = await state(worker)
        money, balance = seen["money"], worker.balance()
        assert (money["spent_nanos"], money["disputed_nanos"]) == (PRICE, 5)
        assert money["held_nanos"] == balance["held"]
        assert money["free_nanos"] == UNIT - balance["held"] - PRICE
        (slice_,) = money["slices"]
        assert (slice_["state"], slice_["slices"]) == ("open", 1)
        assert slice_["owed_nanos"] == PRICE // 2
        assert slice_["remaining_nanos"] + slice_["owed_nanos"] == balance["held"]
        assert (seen["day"]["budget_nanos"], seen["day"]["spent_nanos"]) == (UNIT // 2, PRICE)
        assert seen["day"]["time_zone"] == "Europe/Zurich"


async def test_late_cost_without_money_is_shown(migrated_url: str) -> None:
    """With its freeze, which says so in the currency."""
    async with working(migrated_url) as worker:
        await worker.create(budget=PRICE)
        (one,) = await worker.bids(1)
        worker.pass_service_ms(LEASE_S * 1000 + GRACE_MS)
        await worker.keep_time()
        worker.clock.now += LEASE_S
        await worker.bids(1)
        await worker.report(Report("won", one.ticket, clearing=PRICE))
        seen = await state(worker)
        assert (seen["money"]["unfunded_nanos"], seen["money"]["free_nanos"]) == (PRICE, 0)
        (freeze,) = seen["freezes"]
        assert (freeze["source"], freeze["reason"]) == (
            *("tripwire", "0.001 EUR found no free money"),
        )


async def test_passes_and_feed_are_counted(migrated_url: str) -> None:
    """Why the latest opportunities were passed, without tests, and when outcomes came last."""
    async with working(migrated_url) as worker:
        await worker.create()
        (one,) = await worker.bids(1)
        for test in (False, False, True):
            await worker.bid(floor=CAP, test=test)
        await worker.upkeep.log()
        await worker.report(Report("lost", one.ticket))
        seen = await state(worker)
        assert seen["passes_of_last_1000"] == {"under_floor": 2}
        assert list(seen["feed"]["last_ms"]) == ["lost"]
        assert seen["learner"]["entries_behind"] == 3
        await worker.clerk.teach()
        assert (await state(worker))["learner"]["entries_behind"] == 0


async def test_the_state_says_how_long_an_entry_has_waited_for_the_learner(
    migrated_url: str,
) -> None:
    """Counted from the oldest that was not read; nothing waits once all is read."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        later = text("UPDATE service_clock SET seen_ms = seen_ms + 90000")
        worker.database.write(lambda c: c.execute(later))
        seen = (await state(worker))["learner"]
        assert 85_000 <= seen["behind_ms"] < 100_000
        await worker.clerk.teach()
        assert (await state(worker))["learner"]["behind_ms"] == 0


async def test_every_freeze_is_shown_with_who_and_why(migrated_url: str) -> None:
    """The switch over all stands beside those of the line item."""
    async with working(migrated_url) as worker:
        await worker.create()
        worker.run("INSERT INTO freezing VALUES ('*', 'all', 1, 'anna', 'a look')")
        worker.run("INSERT INTO freezing VALUES (:id, 'person', 2, 'otto', 'mine')", id=NAME)
        seen = await state(worker)
        assert [(f["source"], f["actor"], f["reason"]) for f in seen["freezes"]] == [
            ("all", "anna", "a look"),
            ("person", "otto", "mine"),
        ]


async def test_callers_read_no_number_of_ours(migrated_url: str) -> None:
    """Every sum has an ending by which the edge makes money of it; none is left over."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        told = plain(await state(worker))
        assert (told["bid"]["price_cpm"], told["money"]["budget"]) == (1.0, "1.00")
        assert [name for name in _names(told) if name.endswith("_nanos")] == []
        with pytest.raises(NotFound):
            await worker.operator.state("meadow")


def _names(told: object) -> list[str]:
    if isinstance(told, list):
        return [name for one in told for name in _names(one)]
    if isinstance(told, dict):
        return [*told, *(name for one in told.values() for name in _names(one))]
    return []
