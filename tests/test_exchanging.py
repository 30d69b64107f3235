"""Requests of exchanges through the bidder: deals before the open auction, and no time wasted."""

from __future__ import annotations

import time
from typing import Any

import pytest

from service import money
from service.exchanging import Exchanging
from service.guard.ticket import TicketKeys
from service.openrtb.requests import NoBid
from service.openrtb.responses import Made
from service.store.facts import fact
from tests.builders import PRICE, Worker, working
from tests.openrtb.sources import mapped, request

pytestmark = pytest.mark.anyio

EUROS: dict[str, Any] = {"cur": ["EUR"], "tmax": 5000}
SOURCE = mapped({"deals": "any"})


async def answered(worker: Worker, body: dict[str, Any], late_s: float = 0.0) -> list[Made] | NoBid:
    """What an exchange is answered, if its request came so long ago."""
    exchange = Exchanging(worker.bidder, worker.feedback)
    found = await exchange.answer("north", SOURCE, body, time.monotonic() - late_s)
    return found if isinstance(found, NoBid) else found[2]


def market(*deals: dict[str, Any]) -> dict[str, Any]:
    """A request with deals in euros beside the open auction."""
    offered = [{"bidfloorcur": "EUR", **deal} for deal in deals]
    return request({"bidfloorcur": "EUR", "pmp": {"deals": offered}}, **EUROS)


async def test_a_deal_beyond_the_value_leaves_the_open_auction(migrated_url: str) -> None:
    """Each way is asked in turn, and the first that is worth its floor bids."""
    async with working(migrated_url) as worker:
        await worker.create()
        dear, cheap = {"id": "dear", "bidfloor": 5}, {"id": "cheap", "bidfloor": 1}
        for deals, deal in (((dear,), None), ((dear, cheap), "cheap"), ((cheap, dear), "cheap")):
            made = await answered(worker, market(*deals))
            assert isinstance(made, list)
            assert [(one.terms.deal, one.price) for one in made] == [(deal, PRICE)]


async def test_a_fixed_deal_is_bid_at_its_price(migrated_url: str) -> None:
    """`at` 3: the deal's floor is what it costs, and the ticket says which kind of sale it was."""
    async with working(migrated_url) as worker:
        await worker.create()
        made = await answered(worker, market({"id": "d1", "at": 3, "bidfloor": 0.4}))
        assert isinstance(made, list)
        keys = TicketKeys([bytes.fromhex(worker.database.read(lambda c: fact(c, "ticket_key")))])
        ticket = keys.verify(made[0].ticket)
        assert (made[0].price, ticket.auction, ticket.source) == (
            *(money.price("0.4"), "fixed", "north"),
        )
        assert ticket.scale.currency == "EUR"


async def test_a_request_whose_time_is_over_costs_nothing(migrated_url: str) -> None:
    """No imp is judged, no price is made and nothing is held."""
    async with working(migrated_url) as worker:
        await worker.create()
        assert await answered(worker, request(**EUROS), late_s=6) == NoBid("r1", "no_bid")
        await worker.upkeep.log()
        assert worker.one("SELECT count(*) FROM decision") == 0
        assert worker.balance()["held"] == 0
