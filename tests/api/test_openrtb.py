"""The routes of the open standard against the whole service: answers, refusals, privacy."""

from __future__ import annotations

import gzip
import json
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import pytest
from sqlalchemy import text

from service.app import create_app
from service.connecting import open_database
from service.errors import Unsafe
from service.settings import load
from tests.api.exchanged import BIDS, EUROS, GARDEN, filled, one_bid, rated, serving, spent
from tests.openrtb import published
from tests.openrtb.sources import request
from tests.openrtb.standard import bids_of, faults

pytestmark = pytest.mark.anyio


async def test_an_answer_is_what_the_standard_asks(migrated_url: str, tmp_path: Path) -> None:
    """Every member that the mapping knows, our notices with their macros, and no other."""
    line: dict[str, Any] = {
        "sizes": ["300x250"],
        "cid": "c1",
        "cat": ["IAB3"],
        "attr": [1],
        "exp_s": 60,
    }
    line |= {"adm": "<img src='[[billed_url]]'>", "deals": "any"}
    async with serving(migrated_url, tmp_path, line, seat="s1") as client:
        body = request({"pmp": {"deals": [{"id": "d1", "bidfloorcur": "EUR"}]}}, **EUROS)
        answer = (await client.post(BIDS, json=body)).json()
        assert faults(answer, body) == []
        assert answer["seatbid"][0]["seat"] == "s1"
        assert (answer["id"], answer["cur"], len(answer["bidid"])) == ("r1", "EUR", 16)
        (bid,) = bids_of(answer)
        assert bid["adm"] == f"<img src='{bid['burl']}'>"
        shown = {name: bid[name] for name in bid if name not in ("id", "nurl", "burl", "lurl")}
        assert shown == {
            "impid": "1",
            "price": 2.0,
            "dealid": "d1",
            "adomain": ["garden.example"],
            "crid": "creative-1",
            "cid": "c1",
            "cat": ["IAB3"],
            "cattax": 1,
            "attr": [1],
            "exp": 60,
            "mtype": 1,
            "w": 300,
            "h": 250,
            "adm": bid["adm"],
        }


MALFORMED: list[tuple[dict[str, str], bytes]] = [
    ({}, b"{"),
    ({}, b"[]"),
    ({}, b'{"id": "r1"}'),
    ({}, b'{"id": "r1", "imp": [7]}'),
    ({"Content-Type": "text/plain"}, b'{"id": "r1", "imp": [{"id": "1"}]}'),
    ({"x-openrtb-version": "3.0"}, b'{"id": "r1", "imp": [{"id": "1"}]}'),
    ({"Content-Encoding": "br"}, b"{}"),
    ({"Content-Encoding": "gzip"}, b"{}"),
    ({}, published.BROKEN_RESPONSE),
    *(({}, published.pod_request(kind)) for kind in published.PODS),
]


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_what_is_malformed_is_400_without_content(migrated_url: str, tmp_path: Path) -> None:
    """As the standard says; and nothing that came is repeated."""
    async with serving(migrated_url, tmp_path) as client:
        for headers, content in MALFORMED:
            answer = await client.post(BIDS, content=content, headers=headers)
            assert (answer.status_code, answer.content) == (400, b""), content
            assert answer.headers["x-openrtb-version"] == "2.6"


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_bodies_are_unpacked_within_limits(migrated_url: str, tmp_path: Path) -> None:
    """Gzip is read, a bomb is 413, a long answer is packed for whoever takes it."""
    line = {"adm": "<p>" + "long " * 500 + "</p>"}
    async with serving(migrated_url, tmp_path, line) as client:
        packed = gzip.compress(json.dumps(request(**EUROS)).encode())
        headers = {"Content-Encoding": "gzip", "Accept-Encoding": "gzip"}
        answer = await client.post(BIDS, content=packed, headers=headers)
        assert (answer.status_code, answer.headers["content-encoding"]) == (200, "gzip")
        assert len(bids_of(answer.json())) == 1
        refused = {"Accept-Encoding": "gzip;q=0, identity"}
        plain = await client.post(BIDS, json=request(**EUROS), headers=refused)
        assert "content-encoding" not in plain.headers
        bomb = gzip.compress(b" " * 2**24)
        answer = await client.post(BIDS, content=bomb, headers={"Content-Encoding": "gzip"})
        assert (answer.status_code, answer.json()["code"]) == (413, "body_too_large")


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("source", "version", "changes", "answer"),
    [
        ({}, "2.6", {"tmax": 5}, None),
        ({"no_bid": "reason"}, "2.6", {"tmax": 5}, 15),
        ({"no_bid": "reason"}, "2.5", {"tmax": 5}, None),
        ({"no_bid": "reason"}, "2.6", {"at": 77}, None),
        ({"no_bid": "reason", "other_reason": 501}, "2.5", {"at": 77}, 501),
        ({"no_bid": "reason", "other_reason": 501}, "2.6", {"badv": ["garden.example"]}, 501),
        ({"no_bid": "reason", "other_reason": 501}, "2.6", {"cur": ["GBP"]}, 501),
    ],
)
async def test_there_are_two_ways_not_to_bid(
    migrated_url: str,
    tmp_path: Path,
    source: dict[str, Any],
    version: str,
    changes: dict[str, Any],
    answer: int | None,
) -> None:
    """No content, or a reason that this version of the standard knows where one fits."""
    async with serving(migrated_url, tmp_path, **source) as client:
        headers = {"x-openrtb-version": version}
        got = await client.post(BIDS, json=request(**EUROS | changes), headers=headers)
        if answer is None:
            assert (got.status_code, got.content) == (204, b"")
        else:
            assert got.json() == {"id": "r1", "seatbid": [], "nbr": answer}


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_who_may_ask(migrated_url: str, tmp_path: Path) -> None:
    """Bids need the scope, notices only a ticket of ours; an unknown source is not found."""
    async with serving(migrated_url, tmp_path) as client:
        for path in (BIDS, "/openrtb/north/explain"):
            answer = await client.post(path, json=request(), headers={"Authorization": "Bearer x"})
            assert answer.status_code == 401
        answer = await client.post("/openrtb/south/bids", json=request())
        assert (answer.status_code, answer.json()["code"]) == (404, "no_such_source")
        bid = await one_bid(client, request(**EUROS))
        del client.headers["Authorization"]
        for kind, url in (("win", bid["nurl"]), ("billed", bid["burl"]), ("loss", bid["lurl"])):
            forged = f"/openrtb/{kind}/{'A' * 200}?price=1&reason=102"
            answer = await client.get(forged)
            assert (answer.status_code, answer.json()["code"]) == (404, "bad_ticket")
            assert urlsplit(url).path.startswith(f"/openrtb/{kind}/")
        answer = await client.post(filled(bid["nurl"], PRICE="1.5", CURRENCY="EUR"))
        assert (answer.status_code, answer.content) == (204, b"")


async def test_notices_book_once_by_either_method(migrated_url: str, tmp_path: Path) -> None:
    """A repeat is 204 too, or it would come again; a contradiction is kept and moves nothing."""
    async with serving(migrated_url, tmp_path) as client:
        bid = await one_bid(client, request(**EUROS))
        win = filled(bid["nurl"], PRICE="1.5", CURRENCY="EUR", MIN_TO_WIN="1.49")
        for _ in range(2):
            assert (await client.get(win)).status_code == 204
            assert (await client.post(win, content=b"ignored")).status_code == 204
        assert (await client.get(filled(bid["burl"], PRICE="1.5"))).status_code == 204
        assert (await client.get(filled(bid["lurl"], LOSS="102"))).status_code == 204
        assert (await client.get(filled(bid["nurl"], PRICE="1.6"))).status_code == 204
        assert await spent(client) == "0.0015"


async def test_what_tells_no_price_books_none(migrated_url: str, tmp_path: Path) -> None:
    """An audit is taken and left; a broken source is told so, and the hold stays for the truth."""
    async with serving(migrated_url, tmp_path) as client:
        bid = await one_bid(client, request(**EUROS))
        path = urlsplit(bid["nurl"]).path
        told = {
            "AUDIT": (204, None),
            "${AUCTION_PRICE}": (400, "price_unreplaced"),
            "cheap": (400, "price_unreadable"),
            "9999999999": (400, "price_unreadable"),
            "9000000&cur=USD": (400, "other_currency"),
        }
        for price, (status, code) in told.items():
            answer = await client.get(f"{path}?price={price}")
            assert answer.status_code == status, answer.text
            assert code is None or answer.json()["code"] == code
        assert (await client.get(filled(bid["lurl"], LOSS="0"))).status_code == 204
        assert await spent(client) == "0.00"
        # Without a price the most that it can be is booked.
        assert (await client.get(filled(bid["nurl"]))).status_code == 204
        assert await spent(client) == "0.002"


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_test_is_answered_without_money(migrated_url: str, tmp_path: Path) -> None:
    """It looks like any other, and its win is taken and forgotten."""
    async with serving(migrated_url, tmp_path) as client:
        bid = await one_bid(client, request(**EUROS, test=1))
        assert (await client.get(filled(bid["nurl"], PRICE="1"))).status_code == 204
        state = (await client.get("/v1/line-items/garden/state")).json()["money"]
        assert (state["spent"], state["held"]) == ("0.00", "0.00")


async def test_a_rate_opens_another_currency(migrated_url: str, tmp_path: Path) -> None:
    """Without one it passes; posted over HTTP it counts, and the win settles by it."""
    dollars = request({"bidfloor": 0.5}, tmax=5000)
    async with serving(migrated_url, tmp_path) as client:
        assert (await client.post(BIDS, json=dollars)).status_code == 204
        wish = {"currency": "USD", "into": "EUR", "rate": "0.8", "reason": "A test."}
        answer = await client.post("/v1/rates", json=wish, headers={"Idempotency-Key": "k"})
        assert (answer.status_code, answer.json()["rate"]) == (201, "0.80")
        (rate,) = (await client.get("/v1/rates")).json()["rates"]
        assert (rate["currency"], rate["into"], rate["until_at"]) == ("USD", "EUR", None)
        got = await rated(client, dollars)
        (bid,) = bids_of(got.json())
        assert (bid["price"], got.json()["cur"]) == (2.5, "USD")
        await client.get(filled(bid["nurl"], PRICE="1.25", CURRENCY="USD"))
        assert await spent(client) == "0.001"
        for odd in ({"rate": "0"}, {"rate": "-1"}, {"into": "USD"}, {"currency": "usd"}, {"x": 1}):
            answer = await client.post("/v1/rates", json=wish | odd)
            assert (answer.status_code, answer.json()["code"]) == (422, "bad_field")


async def test_several_imps_share_one_currency(migrated_url: str, tmp_path: Path) -> None:
    """The first bid decides, and what cannot be bid in it is left alone."""
    lines: tuple[dict[str, Any], ...] = (
        {"when": {"imp.tagid": "a"}},
        {"line_item": "other", "when": {"imp.tagid": "b"}},
    )
    async with serving(migrated_url, tmp_path, *lines) as client:
        other = GARDEN | {"id": "other", "currency": "USD"}
        assert (await client.post("/v1/line-items", json=other)).status_code == 201
        body = request({"tagid": "a"}, cur=["EUR", "USD"], tmax=5000)
        body["imp"] += [body["imp"][0] | {"id": "2"}, body["imp"][0] | {"id": "3", "tagid": "b"}]
        answer = (await client.post(BIDS, json=body)).json()
        assert faults(answer, body) == []
        assert [bid["impid"] for bid in bids_of(answer)] == ["1", "2"]
        assert len({bid["id"] for bid in bids_of(answer)}) == 2


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_the_best_of_several_line_items_bids(migrated_url: str, tmp_path: Path) -> None:
    """One bid and one hold; the one that is worth less stands back."""
    lines: tuple[dict[str, Any], ...] = ({}, {"line_item": "rich", "crid": "creative-2"})
    async with serving(migrated_url, tmp_path, *lines) as client:
        rich = GARDEN | {"id": "rich", "policy": {"method": "flat", "price_cpm": 3}}
        await client.post("/v1/line-items", json=rich)
        bid = await one_bid(client, request(**EUROS))
        assert (bid["price"], bid["crid"]) == (3.0, "creative-2")


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_line_item_that_is_not_there_is_said_once(
    migrated_url: str, tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    """The exchange hears no error of it, and the log is not filled by it."""
    async with serving(migrated_url, tmp_path, {"line_item": "nobody"}) as client:
        for _ in range(3):
            assert (await client.post(BIDS, json=request(**EUROS))).status_code == 204
    told = [r.getMessage() for r in caplog.records if "no_such_line_item" in r.getMessage()]
    assert told == ["the mapping of north cannot be kept to: no_such_line_item"]


async def test_what_a_loss_tells_reaches_the_stream(migrated_url: str, tmp_path: Path) -> None:
    """Beaten: a loss with the minimum to win. Filtered: a void with its reason and no price."""
    async with serving(migrated_url, tmp_path) as client:
        for reason in ("102", "203"):
            bid = await one_bid(client, request(**EUROS))
            url = filled(bid["lurl"], LOSS=reason, MIN_TO_WIN="3.25", CURRENCY="EUR")
            assert (await client.get(url)).status_code == 204
    database = open_database(load({"BIDKEEL_DATABASE_URL": migrated_url}))
    statement = text("SELECT kind, body FROM stream WHERE kind IN ('lost', 'void') ORDER BY seq")
    rows = database.read(lambda connection: connection.execute(statement).all())
    database.close()
    (lost, void) = ((row.kind, json.loads(row.body)) for row in rows)
    assert (lost[0], lost[1]["to_win"], lost[1]["source"]) == ("lost", 3_250_000, "north")
    assert (void[0], void[1]["to_win"], void[1]["why"]) == ("void", None, "203 size not allowed")


def test_a_mapping_with_faults_starts_no_service(tmp_path: Path) -> None:
    """Told to whoever starts it, before anything is opened."""
    file = tmp_path / "mapping.json"
    file.write_text('{"sources": {"north": {}}}', "utf-8")
    settings = load({"BIDKEEL_OPENRTB_MAPPING": str(file)})
    with pytest.raises(Unsafe, match=r"sources\.north\.notice_url"):
        create_app(settings)
