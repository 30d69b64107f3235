"""What exchanges send that must not be kept, and what must not break anything."""

from __future__ import annotations

import json
import logging
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import create_engine, inspect, text

from service.connecting import open_database
from service.settings import load
from service.store.audit import audit
from tests.api.exchanged import BIDS, EUROS, filled, rated, serving
from tests.openrtb import published
from tests.openrtb.standard import bids_of

pytestmark = pytest.mark.anyio

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


ODD: list[Any] = [
    None,
    True,
    -1,
    0,
    999,
    1.5,
    1e300,
    "",
    "x" * 3000,
    [],
    [None, 7, {}],
    {},
    {"a": {"b": 1}},
]


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
