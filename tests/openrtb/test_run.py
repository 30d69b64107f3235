"""A complete run over HTTP: two exchanges sell to a real server; both sides' books are equal."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from decimal import Decimal
from pathlib import Path
from typing import Any

import httpx
import pytest

from service import money
from service.commands.server_process import ServerProcess
from service.store.audit import audit
from service.store.database import Database
from tests.openrtb.seller import Books, House, Seller

pytestmark = pytest.mark.anyio

AUCTIONS = 70
FIRST = House("first-house", 1, "USD", Decimal("0.9"))
SECOND = House("second-house", 2, "EUR", deal="spring")
VALUE = {"ceiling": "0.10", "expected": {"per_impression": "0.004"}}
ALPS: dict[str, Any] = {
    "id": "alps",
    "name": "Season pass, alpine garden",
    "currency": "EUR",
    "budget": "50.00",
    "bid_cap_cpm": 8,
    "auction": "first",
    "losses": "priced",
    "value": VALUE,
    "policy": {"method": "flat", "price_cpm": 4},
}
LAKE = ALPS | {
    "id": "lake",
    "auction": "second",
    "losses": "bare",
    "spend_on": "billed",
    "policy": {"method": "flat", "price_cpm": 4},
}


def mapping_of(address: str) -> dict[str, Any]:
    """What each exchange's requests mean, with one line item on each."""
    line = {"type": "banner", "sizes": ["300x250"], "adomain": ["garden.example"], "crid": "c"}
    common = {"notice_url": address, "features": {"device": "device.devicetype"}}
    return {
        "sources": {
            "first-house": common | {"line_items": [line | {"line_item": "alps"}]},
            "second-house": common
            | {"line_items": [line | {"line_item": "lake", "deals": ["spring"], "open": False}]},
        }
    }


@contextmanager
def serving(directory: Path) -> Iterator[ServerProcess]:
    """A server of its own process that speaks with both exchanges."""
    server = ServerProcess(directory, {"BIDKEEL_DEADLINE_MS_MAX": "5000", "BIDKEEL_TICK_S": "1"})
    file = directory / "mapping.json"
    file.write_text(json.dumps(mapping_of(server.address)), "utf-8")
    server.environment["BIDKEEL_OPENRTB_MAPPING"] = str(file)
    with server:
        yield server


async def test_both_sides_books_are_equal(tmp_path: Path) -> None:
    """
    First and second price, notices by GET and POST, repeats, and notices that never come.

    What was told is spent to the nano; what was sold untold is still held; nothing was refused.
    """
    with serving(tmp_path) as server:
        headers = {"Authorization": f"Bearer {server.key}"}
        async with httpx.AsyncClient(base_url=server.address, timeout=30) as http:
            for form in (ALPS, LAKE):
                made = await http.post("/v1/line-items", json=form, headers=headers)
                assert made.status_code == 201, made.text
            rate = {"currency": "USD", "into": "EUR", "rate": "0.9", "reason": "A test."}
            assert (await http.post("/v1/rates", json=rate, headers=headers)).status_code == 201
            alps = await Seller(FIRST, http, server.key, 1).sell(AUCTIONS)
            lake = await Seller(SECOND, http, server.key, 2).sell(AUCTIONS)
            states = {
                name: (await http.get(f"/v1/line-items/{name}/state", headers=headers)).json()
                for name in ("alps", "lake")
            }
            curve = (await http.get("/v1/line-items/alps/curve", headers=headers)).json()
        url = server.environment["BIDKEEL_DATABASE_URL"]
    _check_talk(alps, lake)
    _check_money(states["alps"]["money"], alps, by="any")
    _check_money(states["lake"]["money"], lake, by="billed")
    (source,) = curve["sources"]
    assert (source["source"], source["auction"]) == ("first-house", "first")
    database = Database(url)
    assert database.read(audit) == []
    database.close()


def _check_talk(alps: Books, lake: Books) -> None:
    for books in (alps, lake):
        assert (books.auctions, books.faults) == (AUCTIONS, [])
        assert set(books.calls) == {204}
        assert len(books.won) > 10
        assert books.losses["202"] > 0
        assert books.losses["102"] > 10
        # More calls than outcomes, since some came three times.
        assert books.calls[204] > len(books.told) + books.losses.total() / 2
        assert books.heard != books.charged
    assert (alps.passes, lake.passes) == (0, 0)


def _check_money(shown: dict[str, Any], books: Books, by: str) -> None:
    told = {name.partition(":")[2] for name in books.told if by in ("any", name.partition(":")[0])}
    spent = sum(cost for name, cost in books.won.items() if name in told)
    untold = books.charged - spent
    assert money.nanos(shown["spent"]) == spent > 0
    assert untold > 0
    assert money.nanos(shown["held"]) >= untold
    assert shown["unfunded"] == shown["disputed"] == "0.00"
