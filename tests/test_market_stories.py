"""Mixed auctions over a real database: priced, reported, learnt, and shown."""

from __future__ import annotations

from typing import Any

import pytest

from service.errors import Malformed
from service.feedback import Report
from tests.builders import CAP, NAME, PRICE, Worker, working

pytestmark = pytest.mark.anyio

MEAN = {"policy": {"method": "mean"}}  # Of a guess of 4 CPM.


async def sold(worker: Worker, rivals: list[int], **wish: Any) -> None:
    """Bid against these competing bids, one by one, and report what an exchange would."""
    for rival in rivals:
        answer = await worker.bid(**wish)
        won = (answer.bid or 0) >= rival
        clearing = rival if won and wish.get("auction") == "second" else None
        to_win, kind = (None, "won") if won else (rival, "lost")
        await worker.report(Report(kind, answer.ticket, clearing=clearing, to_win=to_win))


async def test_a_first_price_bid_is_shaded_and_climbs_only_where_it_lost(migrated_url: str) -> None:
    """Rivals at 2 CPM: the first bid is lost low, the next ones win at little more than 2."""
    async with working(migrated_url) as worker:
        await worker.create(auction="first", losses="priced", **MEAN)
        first = await worker.bid(source="north")
        assert first.bid is not None
        assert first.bid < 2_000_000
        assert first.set_by == "value"
        for _ in range(4):
            await sold(worker, [2_000_000] * 2, source="north")
            await worker.learn()
        last = await worker.bid(source="north")
        assert last.bid == 2_000_000
        assert (await worker.bid(source="south")).bid == first.bid


async def test_a_win_pays_its_bid_unless_told_otherwise(migrated_url: str) -> None:
    """Who pays what he bids need not be told; the same price said again is the same outcome."""
    async with working(migrated_url) as worker:
        await worker.create(auction="first", **MEAN)
        answer = await worker.bid()
        assert [r.status for r in await worker.report(Report("won", answer.ticket))] == ["recorded"]
        again = await worker.report(Report("won", answer.ticket, clearing=answer.bid))
        assert [receipt.status for receipt in again] == ["duplicate"]
        assert worker.balance()["spent"] == answer.bid
        body = worker.one("SELECT body FROM stream WHERE kind = 'won'")
        assert '"first"' in str(body).replace("'", '"')
        assert worker.audit() == []


async def test_a_second_price_win_needs_its_price(migrated_url: str) -> None:
    """Whatever the line item's usual auction: the ticket remembers which one it was."""
    async with working(migrated_url) as worker:
        await worker.create(auction="first", **MEAN)
        answer = await worker.bid(auction="second")
        (receipt,) = await worker.report(Report("won", answer.ticket))
        assert (receipt.status, receipt.code) == ("refused", "no_price")


async def test_a_fixed_price_is_taken_or_passed_as_under_a_floor(migrated_url: str) -> None:
    """The bid is the price, held and paid in full; above the value it counts as a floor."""
    async with working(migrated_url) as worker:
        await worker.create(**MEAN)
        taken = await worker.bid(auction="fixed", price=3_000_000)
        assert (taken.bid, taken.set_by) == (3_000_000, "value")
        await worker.report(Report("won", taken.ticket))
        assert worker.balance()["spent"] == 3_000_000
        left = await worker.bid(auction="fixed", price=4_000_001)
        assert (left.bid, left.reason) == (None, "under_floor")
        with pytest.raises(Malformed):
            await worker.bid(auction="fixed")


async def test_a_method_that_draws_for_a_second_price_bids_in_no_other(migrated_url: str) -> None:
    """Not as a line item's auction, nor as that of one opportunity."""
    settings: dict[str, Any] = {
        "policy": {"method": "exptree-win-only"},
        "value": {"ceiling": CAP, "typical": CAP, "expected": {"per_impression": CAP // 2}},
    }
    settings["value"]["expected"]["conversions"] = 1
    async with working(migrated_url) as worker:
        with pytest.raises(Malformed):
            await worker.create(auction="first", **settings)
        await worker.create(**settings)
        assert (await worker.bid()).reason is None
        with pytest.raises(Malformed) as refused:
            await worker.bid(auction="first")
        assert refused.value.code == "auction_not_for_method"


async def test_no_theorem_is_claimed_for_shaded_bids(migrated_url: str) -> None:
    """And the state shows what the default source would be bid."""
    async with working(migrated_url) as worker:
        await worker.create(auction="first", **MEAN)
        state = await worker.operator.state(NAME)
        assert "No theorem covers" in state["certainty"]["guarantee"]
        assert "first price" in state["certainty"]["guarantee"]
        assert state["bid"]["price_cpm_nanos"] == (await worker.bid()).bid


async def test_one_line_item_learns_each_auction_apart(migrated_url: str) -> None:
    """Second-price wins tell prices, first-price ones only that they won, fixed ones nothing."""
    async with working(migrated_url) as worker:
        await worker.create()
        await sold(worker, [PRICE // 2, PRICE // 4, 2 * PRICE], source="north", auction="second")
        await sold(worker, [PRICE // 2, 2 * PRICE], source="north", auction="first")
        await sold(worker, [PRICE], source="north", auction="fixed", price=PRICE)
        await worker.learn()
        shown = await worker.operator.curve(NAME)
        read = {one["auction"]: (one["auctions"], one["method"]) for one in shown["sources"]}
        assert read == {"second": (3.0, "kaplan-meier"), "first": (2.0, "isotonic")}
        assert worker.audit() == []


async def test_several_line_items_compete_and_one_hold_stands(migrated_url: str) -> None:
    """The one that values it most bids; the others are logged as outbid inside, holding nothing."""
    async with working(migrated_url) as worker:
        for name, price in (("low", PRICE), ("high", 3 * PRICE), ("middle", 2 * PRICE)):
            await worker.create(id=name, policy={"method": "flat", "price": price})
        names = ("low", "high", "middle")
        answer = await worker.bid("low", line_items=names)
        assert (answer.line_item, answer.bid) == ("high", 3 * PRICE)
        issued = {name: worker.leasing.hand.slices[name].issued for name in names}
        assert issued == {"low": 0, "high": 3 * PRICE, "middle": 0}
        await worker.upkeep.log()
        reasons = worker.column("SELECT reason FROM decision ORDER BY line_item")
        assert reasons == [None, "outbid_inside", "outbid_inside"]


async def test_who_cannot_bid_leaves_the_opportunity_to_the_next(migrated_url: str) -> None:
    """The best is frozen, the next is under the floor: each is told its own reason."""
    async with working(migrated_url) as worker:
        for name, price in (("low", PRICE), ("high", 3 * PRICE)):
            await worker.create(id=name, policy={"method": "flat", "price": price})
        await worker.bid("low")
        await worker.bid("high")
        await worker.operator.freeze("high", "a test", "tester")
        await worker.upkeep.follow()
        wish = {"line_items": ("high", "low")}
        assert (await worker.bid("high", **wish)).line_item == "low"
        none = await worker.bid("high", **wish, floor=2 * PRICE)
        assert (none.line_item, none.bid, none.reason) == ("high", None, "frozen")


async def test_line_items_of_two_currencies_do_not_compete(migrated_url: str) -> None:
    """Their values cannot be compared."""
    async with working(migrated_url) as worker:
        await worker.create(id="a")
        await worker.create(id="b", currency="CHF")
        with pytest.raises(Malformed):
            await worker.bid("a", line_items=("a", "b"))


FEES = {"share": 120_000_000, "cpm": 150_000}  # 12 % and 0.15 CPM.


async def test_fees_are_held_and_spent_but_not_bid(migrated_url: str) -> None:
    """A value of 2.39 CPM bids 2; won at 1 it costs 1.27, and its old fees go with its ticket."""
    async with working(migrated_url) as worker:
        await worker.create(fees=FEES, policy={"method": "flat", "price": 2_390_000})
        answer = await worker.bid()
        assert answer.bid == 2_000_000
        assert worker.leasing.hand.slices[NAME].issued == 2_390_000
        version = worker.one("SELECT version FROM line_item")
        await worker.operator.patch(NAME, {"fees": None}, version, None, None, "tester")
        await worker.report(Report("won", answer.ticket, clearing=1_000_000))
        assert worker.balance()["spent"] == 1_270_000
        assert worker.audit() == []


async def test_a_floor_and_a_fixed_price_are_weighed_with_their_fees(migrated_url: str) -> None:
    """2 CPM cost 2.39: at that value they are reached, and a nano more is not."""
    async with working(migrated_url) as worker:
        await worker.create(fees=FEES, policy={"method": "flat", "price": 2_390_000})
        assert (await worker.bid(floor=2_000_000)).bid == 2_000_000
        assert (await worker.bid(floor=2_000_001)).reason == "under_floor"
        fixed = await worker.bid(auction="fixed", price=2_000_000)
        await worker.report(Report("won", fixed.ticket))
        assert (fixed.bid, worker.balance()["spent"]) == (2_000_000, 2_390_000)
        assert (await worker.bid(auction="fixed", price=2_000_001)).reason == "under_floor"


async def test_fees_above_the_value_leave_nothing_to_bid(migrated_url: str) -> None:
    """No price is left when the fees alone cost what an impression is worth."""
    async with working(migrated_url) as worker:
        await worker.create(fees=FEES, policy={"method": "flat", "price": 150_000})
        assert (await worker.bid()).reason == "price_rounds_to_zero"
