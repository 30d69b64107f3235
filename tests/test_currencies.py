"""Rates as orders, and bids in other currencies from the rate to the settled cost."""

from __future__ import annotations

from typing import Any

import pytest

from service import money
from service.errors import Conflict, Malformed
from service.feedback import Report
from tests.builders import PRICE, Worker, working

pytestmark = pytest.mark.anyio

ALWAYS = (0, None)
USD: dict[str, Any] = {"currencies": ("USD",), "floor_currency": "USD", "source": "north"}


async def post(worker: Worker, rate: str, currency: str = "USD", **key: str) -> None:
    """Let a rate into euros count, and let the worker hear of it."""
    rating = worker.operator.rating
    await rating.post(currency, "EUR", money.nanos(rate), ALWAYS, "A test.", "tester", **key)
    await worker.upkeep.follow()


async def test_without_a_rate_it_passes_and_with_one_it_bids(migrated_url: str) -> None:
    """The pass has its name, and the rate reaches a worker with the next changes."""
    async with working(migrated_url) as worker:
        await worker.create()
        assert (await worker.bid(**USD)).reason == "no_rate"
        await post(worker, "0.9")
        answer = await worker.bid(**USD)
        assert (answer.bid, answer.currency) == (PRICE * 10 // 9, "USD")


async def test_a_bid_in_its_own_currency_needs_no_rate(migrated_url: str) -> None:
    """Where the line item's currency is allowed it is taken, though another is named first."""
    async with working(migrated_url) as worker:
        await worker.create()
        answer = await worker.bid(currencies=("USD", "EUR"), floor=0, floor_currency="USD")
        assert (answer.bid, answer.currency) == (PRICE, "EUR")
        # Its floor is in dollars all the same, and nobody knows what those are worth.
        assert (await worker.bid(**USD | {"currencies": ("EUR",), "floor": 1})).reason == "no_rate"


async def test_an_outcome_settles_by_the_rate_of_its_bid(migrated_url: str) -> None:
    """A rate posted in between moves no open bid; repeats and the audit find the same cost."""
    async with working(migrated_url) as worker:
        await worker.create()
        await post(worker, "0.9")
        answer = await worker.bid(**USD)
        await post(worker, "2")
        assert (await worker.bid(**USD)).bid == PRICE // 2
        won = Report("won", answer.ticket, clearing=1_000_001, currency="USD")
        receipts = await worker.report(won, won)
        assert [receipt.status for receipt in receipts] == ["recorded", "duplicate"]
        assert worker.balance()["spent"] == 900_001  # 900,000.9 nanos.
        assert worker.audit() == []


async def test_the_hold_covers_the_bid_at_its_own_price(migrated_url: str) -> None:
    """Rounded down on its way out and up on its way in: nothing is disputed."""
    async with working(migrated_url) as worker:
        await worker.create()
        await post(worker, "0.7")
        answers = [await worker.bid(**USD) for _ in range(5)]
        rows = [Report("won", one.ticket, clearing=one.bid) for one in answers]
        assert {receipt.status for receipt in await worker.report(*rows)} == {"recorded"}
        assert worker.balance()["disputed"] == 0
        assert 5 * (PRICE - 1) <= worker.balance()["spent"] <= 5 * PRICE
        assert worker.audit() == []


@pytest.mark.parametrize(
    ("report", "code"),
    [
        (Report("won", clearing=1, currency="GBP"), "other_currency"),
        (Report("won", clearing=money.PRICE_NANOS_MAX * 10), "bad_price"),
        (Report("won"), "no_price"),
    ],
)
async def test_what_cannot_be_a_price_of_this_bid_is_refused(
    migrated_url: str, report: Report, code: str
) -> None:
    """Another currency, a price beyond all bids or none in a second-price auction books nothing."""
    async with working(migrated_url) as worker:
        await worker.create()
        await post(worker, "0.9")
        ticket = (await worker.bid(**USD)).ticket
        names = ("kind", "clearing", "currency")
        said = Report(ticket=ticket, **{name: getattr(report, name) for name in names})
        (receipt,) = await worker.report(said)
        assert (receipt.status, receipt.code) == ("refused", code)
        assert worker.balance()["spent"] == 0


async def test_an_unknown_price_costs_the_bid(migrated_url: str) -> None:
    """Whoever pays and is not told how much has paid at most what was held."""
    async with working(migrated_url) as worker:
        await worker.create()
        ticket = (await worker.bid()).ticket
        assert (await worker.report(Report("won", ticket, at_the_bid=True)))[0].status == "recorded"
        assert worker.balance()["spent"] == PRICE


async def test_a_floor_of_another_currency_is_a_floor(migrated_url: str) -> None:
    """A floor in pounds stops a bid in dollars that is worth less, and lets one that is not."""
    async with working(migrated_url) as worker:
        await worker.create()
        await post(worker, "0.9")
        await post(worker, "1.2", "GBP")
        wish = USD | {"floor_currency": "GBP"}
        # One euro CPM is 0.833333 pounds.
        assert (await worker.bid(**wish, floor=833_334)).reason == "under_floor"
        assert (await worker.bid(**wish, floor=833_332)).bid == PRICE * 10 // 9


async def test_a_fixed_price_leaves_as_it_is_asked(migrated_url: str) -> None:
    """Roundings there and back add nothing to a price that is to be met."""
    async with working(migrated_url) as worker:
        await worker.create()
        await post(worker, "0.007")
        fixed = {**USD, "auction": "fixed"}
        for price in (100_000_001, 142_857_142):
            assert (await worker.bid(**fixed, price=price)).bid == price
        assert (await worker.bid(**fixed, price=142_857_143)).reason == "under_floor"


async def test_several_impressions_are_held_together(migrated_url: str) -> None:
    """One sale that brings four impressions is bid at a quarter each, and held in full."""
    async with working(migrated_url) as worker:
        await worker.create()
        four = 4 * 10**9
        wish: dict[str, Any] = {"currencies": ("EUR",), "floor_currency": "EUR", "multiplier": four}
        answer = await worker.bid(**wish, floor=PRICE // 4)
        assert answer.bid == PRICE // 4
        assert (await worker.bid(**wish, floor=PRICE // 4 + 1)).reason == "under_floor"
        await worker.report(Report("won", answer.ticket, clearing=200_000, delivered=3 * 10**9))
        assert worker.balance()["spent"] == 600_000


async def test_a_rate_is_journalled_and_given_once(migrated_url: str) -> None:
    """The same key posts one rate; the journal says who and why, with what was before."""
    async with working(migrated_url) as worker:
        await post(worker, "0.9", idempotency="k1")
        await post(worker, "0.9", idempotency="k1")
        with pytest.raises(Conflict):
            await post(worker, "0.8", idempotency="k1")
        (row,) = await worker.operator.rating.list()
        assert (row["currency"], row["into"], row["rate"]) == ("USD", "EUR", 900_000_000)
        await post(worker, "0.8")
        assert [row["rate"] for row in await worker.operator.rating.list()] == [800_000_000]
        assert worker.one("SELECT count(*) FROM journal WHERE action = 'rate'") == 2
        assert '"before": [{' in worker.one("SELECT max(detail) FROM journal WHERE number = 2")


@pytest.mark.parametrize(("into", "span"), [("USD", (None, None)), ("EUR", (10, 10))])
async def test_a_rate_without_sense_is_refused(
    migrated_url: str, into: str, span: tuple[int | None, int | None]
) -> None:
    """One currency into itself, or an end before the beginning, changes nothing."""
    async with working(migrated_url) as worker:
        with pytest.raises(Malformed):
            await worker.operator.rating.post("USD", into, 1, span, "A test.", "tester")
        assert await worker.operator.rating.list() == []
