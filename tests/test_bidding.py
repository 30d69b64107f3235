"""The first story over a real database: every reason to pass, and what a price is taken out of."""

from __future__ import annotations

import pytest

from service.errors import NotFound
from tests.builders import CAP, PRICE, working

pytestmark = pytest.mark.anyio


async def test_a_bid_takes_its_price_out_of_a_slice(migrated_url: str) -> None:
    """A price leaves with a ticket, out of a slice that the database holds for it."""
    async with working(migrated_url) as worker:
        await worker.create()
        answer = await worker.bid(request_id="op-1")
        assert (answer.bid, answer.reason, answer.request_id) == (PRICE, None, "op-1")
        assert (answer.set_by, answer.method) == ("value", "flat")
        held = worker.leasing.hand.slices["garden"]
        assert (held.issued, held.bids) == (PRICE, 1)
        assert worker.balance()["held"] == held.amount == 16 * CAP


async def test_an_unknown_line_item_is_not_found(migrated_url: str) -> None:
    """A bid for a line item that does not exist is refused, and found once it is created."""
    async with working(migrated_url) as worker:
        with pytest.raises(NotFound):
            await worker.bid()
        await worker.create()
        await worker.upkeep.follow()
        assert (await worker.bid()).bid == PRICE
