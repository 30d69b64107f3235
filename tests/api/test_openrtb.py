"""The routes of the open standard against the whole service: answers, refusals, privacy."""

from __future__ import annotations

import asyncio
import gzip
import json
import logging
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import httpx
import numpy as np
import pytest
from sqlalchemy import create_engine, inspect, text

from service.app import create_app
from service.connecting import open_database
from service.settings import load
from service.store import keys
from service.store.audit import audit
from tests.openrtb import published
from tests.openrtb.sources import LINE, SOURCE, request
from tests.openrtb.standard import bids_of, faults

pytestmark = pytest.mark.anyio

BIDS = "/openrtb/north/bids"
GARDEN: dict[str, Any] = {
    "id": "garden",
    "name": "An invented garden",
    "currency": "EUR",
    "budget": "5.00",
    "bid_cap_cpm": 8,
    "value": {"ceiling": "0.10", "arrival": "once"},
    "policy": {"method": "flat", "price_cpm": 2},
}
EUROS = {"cur": ["EUR"], "tmax": 5000}


@asynccontextmanager
async def serving(
    url: str, directory: Path, *lines: dict[str, Any], **source: Any
) -> AsyncIterator[httpx.AsyncClient]:
    """The service with one line item and a mapping, before a caller who may do everything."""
    built = [LINE | line for line in lines or ({},)]
    told = {"sources": {"north": SOURCE | source | {"line_items": built}}}
    file = directory / "mapping.json"
    file.write_text(json.dumps(told), "utf-8")
    patient = {"BIDKEEL_DEADLINE_MS": "5000", "BIDKEEL_DEADLINE_MS_MAX": "5000"}
    quick = {"BIDKEEL_CHANGE_POLL_MS": "20", "BIDKEEL_TICK_S": "1"}
    named = {"BIDKEEL_DATABASE_URL": url, "BIDKEEL_OPENRTB_MAPPING": str(file)}
    settings = load({**named, **patient, **quick})
    database = open_database(settings)
    _, bearer = keys.add(database, "tests", ["admin"])
    database.close()
    app = create_app(settings)
    transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
    headers = {"Authorization": f"Bearer {bearer}"}
    async with (
        app.router.lifespan_context(app),
        httpx.AsyncClient(transport=transport, base_url="http://test", headers=headers) as client,
    ):
        assert (await client.post("/v1/line-items", json=GARDEN)).status_code == 201
        yield client


async def spent(client: httpx.AsyncClient, name: str = "garden") -> str:
    """What a line item has spent, as people read it."""
    return str((await client.get(f"/v1/line-items/{name}/state")).json()["money"]["spent"])


async def one_bid(client: httpx.AsyncClient, body: dict[str, Any]) -> dict[str, Any]:
    """The one bid on a request."""
    answer = await client.post(BIDS, json=body)
    assert answer.status_code == 200, answer.text
    assert faults(answer.json(), body) == []
    (bid,) = bids_of(answer.json())
    return dict(bid)


async def rated(client: httpx.AsyncClient, body: dict[str, Any]) -> httpx.Response:
    """The answer once the rate has reached the worker; a loop that is kept busy hears late."""
    async with asyncio.timeout(20):
        while (answer := await client.post(BIDS, json=body)).status_code == 204:
            await asyncio.sleep(0.02)
    return answer


def filled(url: str, **macros: str) -> str:
    """A notice's address below our own host, with its macros replaced and the rest empty."""
    for name, value in macros.items():
        url = url.replace(f"${{AUCTION_{name}}}", value)
    while "${" in url:
        url = url[: url.index("${")] + url[url.index("}") + 1 :]
    parts = urlsplit(url)
    return f"{parts.path}?{parts.query}"


async def test_an_answer_is_what_the_standard_asks(migrated_url: str, tmp_path: Path) -> None:
    """Every member that the mapping knows, our notices with their macros, and no other."""
    line = {"sizes": ["300x250"], "cid": "c1", "cat": ["IAB3"], "attr": [1], "exp_s": 60}
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


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("headers", "content"),
    [
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
    ],
)
async def test_what_is_malformed_is_400_without_content(
    migrated_url: str, tmp_path: Path, headers: dict[str, str], content: bytes
) -> None:
    """As the standard says; and nothing that came is repeated."""
    async with serving(migrated_url, tmp_path) as client:
        answer = await client.post(BIDS, content=content, headers=headers)
        assert (answer.status_code, answer.content) == (400, b"")
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
    lines = ({"when": {"imp.tagid": "a"}}, {"line_item": "other", "when": {"imp.tagid": "b"}})
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
    lines = ({}, {"line_item": "rich", "crid": "creative-2"})
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


CANARY = "canary-7d21"


def personal() -> dict[str, Any]:
    """A request with something to betray in every personal place, and in the private ones."""
    body = json.loads(json.dumps(published.EXPANDABLE)) | EUROS
    body["user"] = {
        **{name: CANARY for name in ("id", "buyeruid", "keywords", "gender", "consent")},
        "yob": 1990,
        "data": [{"id": CANARY, "segment": [{"id": CANARY, "value": CANARY}]}],
        "eids": [{"source": CANARY, "uids": [{"id": CANARY}]}],
        "ext": {"consent": CANARY, "eids": [{"source": CANARY}]},
        "geo": {"lat": 47.1234567, "lon": 8.7654321, "zip": CANARY, "city": CANARY},
    }
    body["device"] = {
        **{name: CANARY for name in ("ua", "ip", "ipv6", "ifa", "didsha1", "dpidmd5", "macsha1")},
        "geo": {"lat": 47.1234567, "lon": 8.7654321, "zip": CANARY, "city": CANARY},
        "devicetype": 4,
        "ext": {"id": CANARY},
    }
    body["regs"] = {"gdpr": 1, "us_privacy": CANARY, "gpp": CANARY, "ext": {"x": CANARY}}
    body["site"] |= {"page": f"https://x.example/?who={CANARY}", "ref": CANARY, "search": CANARY}
    body["imp"][0] |= {"tagid": "slot", "bidfloor": 0, "ext": {"id": CANARY}}
    body["ext"] = {CANARY: CANARY}
    return dict(body)


async def test_nothing_personal_is_kept_or_said(
    migrated_url: str, tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    """Not in the answer, the explanation, the log or any column, from the bid to its billing."""
    caplog.set_level(logging.DEBUG)
    async with serving(migrated_url, tmp_path) as client:
        answers = [
            await client.post("/openrtb/north/explain", json=personal()),
            await client.post(BIDS, json=personal()),
            await client.post(BIDS, content=json.dumps(personal()).encode()[:-1]),
            await client.post(BIDS, json=personal() | {"imp": CANARY}),
        ]
        (bid,) = bids_of(answers[1].json())
        for url in (filled(bid["nurl"], PRICE="1"), filled(bid["burl"], PRICE="1")):
            answers.append(await client.get(f"{url}&who={CANARY}", headers={"X-Device-IP": CANARY}))
        answers.append(await client.get(f"/openrtb/win/{CANARY}?price={CANARY}"))
    assert [a.status_code for a in answers] == [200, 200, 400, 400, 204, 204, 400]
    said = "".join(answer.text for answer in answers)
    # The tests' own client logs the addresses that it calls.
    logged = "".join(r.getMessage() for r in caplog.records if r.name.startswith("service"))
    kept = _everything(migrated_url)
    assert "garden" in kept
    for trace in (CANARY, "47.1234567", "8.7654321"):
        assert trace not in said + logged + kept


def _everything(url: str) -> str:
    """Every column of every table as text."""
    engine = create_engine(url)
    with engine.connect() as connection:
        # The names come from the database itself.
        found = [
            str(connection.execute(text(f"SELECT * FROM {table}")).all())  # noqa: S608
            for table in inspect(engine).get_table_names()
        ]
    engine.dispose()
    return "".join(found)


ODD = [None, True, -1, 0, 999, 1.5, 1e300, "", "x" * 3000, [], [None, 7, {}], {}, {"a": {"b": 1}}]


def spoil(body: Any, generator: np.random.Generator, depth: int = 0) -> Any:
    """A request with a few odd values anywhere in it, unknown codes and wrong types among them."""
    if depth and generator.random() < 0.06:
        return ODD[generator.integers(len(ODD))]
    if isinstance(body, dict):
        return {name: spoil(value, generator, depth + 1) for name, value in body.items()}
    if isinstance(body, list):
        return [spoil(value, generator, depth + 1) for value in body]
    return body


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_no_spoilt_request_is_an_error_of_ours(migrated_url: str, tmp_path: Path) -> None:
    """Drawn from the published ones: a bid by the standard, none, or 400; and the books stand."""
    lines = (
        {"deals": "any", "when": {"device.dnt": [0, 1]}},
        {"type": "video", "duration_s": 15, "cat": ["IAB3"], "language": "de"},
        {"attr": [3], "sizes": ["300x250"], "deals": "any"},
    )
    features = {str(n): name for n, name in enumerate(["imp.size", "site.cat", "app.ver", "at"])}
    generator, statuses = np.random.default_rng(8), set()
    async with serving(migrated_url, tmp_path, *lines, features=features) as client:
        wish = {"currency": "USD", "into": "EUR", "rate": "0.9", "reason": "A test."}
        assert (await client.post("/v1/rates", json=wish)).status_code == 201
        await rated(client, published.APP | {"tmax": 4000})
        for turn in range(400):
            kinds = list(published.REQUESTS.values())
            body = spoil(kinds[turn % len(kinds)] | {"tmax": 4000}, generator)
            answer = await client.post(BIDS, json=body)
            statuses.add(answer.status_code)
            assert answer.status_code in (200, 204, 400), (turn, body, answer.text)
            found = bids_of(answer.json()) if answer.status_code == 200 else []
            assert all(bid["price"] <= 8 and bid["impid"] for bid in found)
            told = await client.post("/openrtb/north/explain", json=body)
            assert told.status_code == 200, (turn, body, told.text)
            for bid in found:
                reply = await client.get(filled(bid["nurl"], PRICE=str(bid["price"])))
                assert reply.status_code == 204
    assert statuses == {200, 204, 400}
    database = open_database(load({"BIDKEEL_DATABASE_URL": migrated_url}))
    assert database.read(audit) == []
    database.close()
