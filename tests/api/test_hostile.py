"""No hostile call breaks the service, changes a row or comes back in an answer, on any route."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from typing import Any

import httpx
import pytest

from tests.api.hostile import BODIES, CANARY, HOSTILE, spoiled

pytestmark = pytest.mark.anyio

LINE_ITEM = {
    "id": "honest",
    "name": "Honest line item",
    "currency": "EUR",
    "budget": "500.00",
    "daily_budget": "60.00",
    "bid_cap_cpm": 8.0,
    "auction": "second",
    "flight": {
        "starts_at": "2026-01-01T00:00:00Z",
        "ends_at": "2100-01-01T00:00:00Z",
        "time_zone": "Europe/Zurich",
    },
    "spend_on": "won",
    "grace_s": 900,
    "billing_grace_s": 86400,
    "strict": False,
    "value": {
        "ceiling": "0.10",
        "typical": "0.05",
        "arrival": "once",
        "window_s": 604800,
        "delay_mean_s": 60,
        "expected": {"per_impression": "0.0020", "conversions": 1},
        "drift": {"how": "window", "rounds": 500},
        "change": {"action": "flag", "ratio": 2.0, "threshold": 8.0},
    },
    "losses": "bare",
    "tripwires": {"value_silence_s": 60},
    "policy": {"method": "flat", "price_cpm": 2.0},
    "pacing": {"method": "none", "profile": None},
    "confirm": "learning_cost",
}
CREATE_FIELDS = {
    "id": "id",
    "name": "words",
    "currency": "choice",
    "budget": "money",
    "daily_budget": "money",
    "bid_cap_cpm": "money",
    "auction": "choice",
    "flight": "object",
    "flight.starts_at": "time",
    "flight.ends_at": "time",
    "flight.time_zone": "choice",
    "spend_on": "choice",
    "grace_s": "whole",
    "billing_grace_s": "whole",
    "strict": "truth",
    "value": "object",
    "value.ceiling": "money",
    "value.typical": "money",
    "value.arrival": "choice",
    "value.window_s": "whole",
    "value.delay_mean_s": "whole",
    "value.expected": "object",
    "value.expected.per_impression": "money",
    "value.expected.conversions": "whole",
    "value.drift": "object",
    "value.drift.how": "choice",
    "value.drift.rounds": "whole",
    "value.change": "object",
    "value.change.action": "choice",
    "value.change.ratio": "money",
    "value.change.threshold": "money",
    "losses": "choice",
    "tripwires": "object",
    "policy": "object",
    "policy.method": "choice",
    "policy.price_cpm": "money",
    "pacing": "object",
    "pacing.method": "choice",
    "pacing.profile": "object",
    "return_target": "object",
    "confirm": "ascii",
}
FIXED = {"id", "currency", "auction", "flight.time_zone", "spend_on", "value.arrival"}
CHANGE = {name: member for name, member in LINE_ITEM.items() if name not in FIXED}
BID = {
    "request_id": "op-1",
    "line_item": "honest",
    "source": "north-exchange",
    "auction": "second",
    "floor_cpm": 0.4,
    "features": {"device": "phone", "hour": 13},
    "value_hint": "0.1",
    "deadline_ms": 80,
    "test": False,
}
BID_FIELDS = {
    "request_id": "ascii",
    "line_item": "id",
    "source": "ascii",
    "auction": "choice",
    "floor_cpm": "money",
    "features": "features",
    "value_hint": "money",
    "deadline_ms": "whole",
    "test": "truth",
}
OUTCOME_FIELDS = {
    "won": {"kind": "choice", "ticket": "choice", "clearing_cpm": "money", "to_win_cpm": "money"},
    "lost": {"ticket": "choice", "to_win_cpm": "money", "at": "time"},
    "void": {"ticket": "choice", "why": "words"},
    "billed": {"ticket": "choice", "clearing_cpm": "money"},
    "value": {"ref": "choice", "value": "money", "event_id": "ascii", "corrects": "ascii"},
}
OUTCOME = {"clearing_cpm": 0.9, "to_win_cpm": 1.1, "value": "1.00", "event_id": "cv-1"}
ONE = "/v1/line-items/honest"
WRITING = [
    ("POST", "/v1/bids"),
    ("POST", "/v1/bids/batch"),
    ("POST", "/v1/outcomes"),
    ("POST", "/v1/line-items"),
    ("PATCH", ONE),
    *(("POST", f"{ONE}/{order}") for order in ("freeze", "thaw", "reset", "close")),
    *(("POST", f"{ONE}/{order}") for order in ("retract", "rewind", "reverse", "reconcile")),
    *(("POST", f"{ONE}/quarantine/1/{order}") for order in ("retry", "release")),
    ("POST", "/v1/freeze"),
    ("POST", "/v1/thaw"),
]
Written = Callable[[], dict[str, int]]


async def honest(client: httpx.AsyncClient) -> dict[str, Any]:
    """Create the honest line item and get one of its bids, which a busy machine may delay."""
    created = await client.post("/v1/line-items", json=LINE_ITEM)
    assert created.status_code == 201, created.text
    bid: dict[str, Any] = {}
    for _ in range(100):
        answer = await client.post("/v1/bids", json={**BID, "deadline_ms": 200})
        assert answer.status_code == 200, answer.text
        bid = answer.json()
        if bid["pass"] not in ("past_deadline", "overloaded"):
            break
    assert bid["ticket"], bid
    return bid


def tokens(fields: dict[str, str]) -> Iterator[tuple[str, str]]:
    """Every field with every hostile token of its kind."""
    return ((path, token) for path, kind in fields.items() for token in HOSTILE[kind])


def check_refused(answer: httpx.Response, what: object) -> None:
    """The answer is a problem of the 400s, without the canary."""
    assert 400 <= answer.status_code < 500, (what, answer.status_code, answer.text[:300])
    assert answer.headers["content-type"] == "application/problem+json", what
    assert {"type", "title", "status", "code", "detail"} <= answer.json().keys(), what
    assert CANARY not in answer.text, what


@pytest.mark.parametrize(("method", "path"), WRITING)
async def test_no_hostile_body_gets_through(
    app_client: httpx.AsyncClient, written: Written, method: str, path: str
) -> None:
    """Broken JSON, deep brackets, doubled keys and giants are refused by every writing route."""
    await honest(app_client)
    before = written()
    for body in BODIES:
        answer = await app_client.request(method, path, content=body, headers={"If-Match": '"1"'})
        check_refused(answer, body[:60])
    assert written() == before


async def test_no_hostile_field_creates_a_line_item(
    app_client: httpx.AsyncClient, written: Written
) -> None:
    """Each field of a new line item refuses every hostile thing of its kind."""
    await honest(app_client)
    before = written()
    template = {**LINE_ITEM, "id": "another"}
    for path, token in tokens(CREATE_FIELDS):
        answer = await app_client.post("/v1/line-items", content=spoiled(template, path, token))
        check_refused(answer, (path, token[:60]))
    assert written() == before
    assert (await app_client.post("/v1/line-items", json=template)).status_code == 201


async def test_no_hostile_field_changes_a_line_item(
    app_client: httpx.AsyncClient, written: Written
) -> None:
    """Each field of a change refuses the same, and the version stays."""
    await honest(app_client)
    before = written(), (await app_client.get(ONE)).json()
    template = json.loads(json.dumps(CHANGE))
    del template["flight"]["time_zone"], template["value"]["arrival"]
    fields = {path: kind for path, kind in CREATE_FIELDS.items() if path not in FIXED}
    for path, token in [*tokens({**fields, "reason": "words"})]:
        body = spoiled(template, path, token)
        answer = await app_client.patch(ONE, content=body, headers={"If-Match": '"1"'})
        check_refused(answer, (path, token[:60]))
    assert (written(), (await app_client.get(ONE)).json()) == before
    changed = await app_client.patch(ONE, json=template, headers={"If-Match": '"1"'})
    assert changed.status_code == 200, changed.text


async def test_no_hostile_field_gets_a_price(
    app_client: httpx.AsyncClient, written: Written
) -> None:
    """Each field of an opportunity refuses every hostile thing, alone and inside a batch."""
    await honest(app_client)
    before = written()
    for path, token in tokens(BID_FIELDS):
        body = spoiled(BID, path, token)
        check_refused(await app_client.post("/v1/bids", content=body), (path, token[:60]))
        if is_json(token):
            await check_row(app_client, body, (path, token[:60]))
    assert written() == before


async def check_row(client: httpx.AsyncClient, row: bytes, what: object) -> None:
    """A bad row in a batch is an error in its place and spoils no other."""
    unknown = json.dumps({**BID, "line_item": "nobody"}).encode()
    body = b'{"opportunities": [' + row + b", " + unknown + b"]}"
    answer = await client.post("/v1/bids/batch", content=body)
    if answer.status_code == 413:
        return
    assert answer.status_code == 200, (what, answer.text[:300])
    first, second = answer.json()["answers"]
    assert first["error"]["code"], what
    assert second["error"]["code"] == "no_such_line_item", what
    assert CANARY not in answer.text, what


def is_json(token: str) -> bool:
    """Whether a token spoils only its own row; what is no JSON spoils the whole body."""
    strict = token not in {"NaN", "Infinity", "-Infinity", "9" * 5000} and "NaN" not in token
    return strict and token.count(f'"{CANARY}":') < 2


@pytest.mark.parametrize("kind", OUTCOME_FIELDS)
async def test_no_hostile_field_settles_an_outcome(
    app_client: httpx.AsyncClient, written: Written, kind: str
) -> None:
    """A bad row is refused in its place with a code; no row is booked, none comes back."""
    bid = await honest(app_client)
    before = written()
    fields = OUTCOME_FIELDS[kind]
    template = {"ticket": bid["ticket"], "ref": bid["ref"], "kind": kind, **OUTCOME}
    for path, token in tokens(fields):
        if not is_json(token):
            continue
        body = b'{"outcomes": [' + spoiled(template, path, token) + b', {"kind": "won"}]}'
        answer = await app_client.post("/v1/outcomes", content=body)
        assert answer.status_code == 200, (path, token[:60], answer.text[:300])
        for result in answer.json()["results"]:
            assert result["status"] == "refused", (path, token[:60], result)
            assert result["code"], (path, token[:60])
        assert CANARY not in answer.text, (path, token[:60])
    assert written() == before


@pytest.mark.parametrize("order", ["freeze", "thaw", "reset"])
async def test_no_hostile_reason_gives_an_order(
    app_client: httpx.AsyncClient, written: Written, order: str
) -> None:
    """An order without a proper reason is refused, for one line item and for all."""
    await honest(app_client)
    before = written()
    for path in [f"{ONE}/{order}"] if order == "reset" else [f"{ONE}/{order}", f"/v1/{order}"]:
        for token in [*HOSTILE["words"], "null"]:
            answer = await app_client.post(path, content=spoiled({}, "reason", token))
            check_refused(answer, (path, token[:60]))
    assert written() == before


async def test_hostile_paths_parameters_and_headers_are_refused(
    app_client: httpx.AsyncClient, written: Written
) -> None:
    """Ids in paths, query parameters and headers are read as strictly as bodies."""
    await honest(app_client)
    before = written()
    odd = [f"%00{CANARY}", f"{CANARY}%27--", f"%ed%a0%80{CANARY}", CANARY * 100, f"..%2f{CANARY}"]
    for name in [*odd, "nobody"]:
        for path in (f"/v1/line-items/{name}", f"/v1/line-items/{name}/state", f"/docs/{name}"):
            check_refused(await app_client.get(path), path[:80])
        order = await app_client.post(f"/v1/line-items/{name}/freeze", json={"reason": "A test."})
        check_refused(order, name[:80])
    for query in (
        f"limit={CANARY}",
        "limit=0",
        "limit=201",
        f"after=%00{CANARY}",
        "x=1",
        "limit=1&limit=2",
    ):
        check_refused(await app_client.get(f"/v1/line-items?{query}"), query)
    for header in ("", "*", "1", 'W/"1"', '"1", "2"', f'"{CANARY}"', '"' + "9" * 400 + '"', '"-1"'):
        answer = await app_client.patch(ONE, json={"name": "New"}, headers={"If-Match": header})
        check_refused(answer, header[:80])
    for odd_key in (b"", CANARY.encode() * 10, "ü".encode()):
        headers = {b"Idempotency-Key": odd_key}
        answer = await app_client.post("/v1/freeze", json={"reason": "A test."}, headers=headers)
        check_refused(answer, odd_key)
    assert written() == before


@pytest.mark.parametrize(("method", "path"), WRITING)
async def test_without_a_key_nothing_is_read(
    app_client: httpx.AsyncClient, written: Written, method: str, path: str
) -> None:
    """No key, an unknown key and an odd header are 401 before the body is looked at."""
    before = written()
    for header in ("", "Bearer", f"Bearer {CANARY}", f"Basic {CANARY}", "Bearer " + "x" * 9000):
        headers = {"Authorization": header}
        answer = await app_client.request(method, path, content=BODIES[6], headers=headers)
        check_refused(answer, header[:60])
        assert answer.status_code == 401
        assert answer.headers["www-authenticate"] == "Bearer"
    assert written() == before


async def test_injections_through_a_name_stay_text(app_client: httpx.AsyncClient) -> None:
    """A name may hold SQL or HTML; it is kept as text, comes back as JSON and does nothing."""
    for number, token in enumerate(
        ["'; DROP TABLE line_item; --", "<script>alert(1)</script>", "=1+1"]
    ):
        template = {**LINE_ITEM, "id": f"named-{number}", "name": token}
        assert (await app_client.post("/v1/line-items", json=template)).status_code == 201
        answer = await app_client.get(f"/v1/line-items/named-{number}")
        assert answer.json()["name"] == token
        assert answer.headers["content-type"] == "application/json"
    listed = (await app_client.get("/v1/line-items")).json()["line_items"]
    assert len(listed) == 3
