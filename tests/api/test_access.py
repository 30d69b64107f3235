"""Every route with every kind of key: who is let in, made into a table that is kept beside.

The routes come from the app itself, so one that is new fails here until it has its line.
"""

from __future__ import annotations

from collections.abc import AsyncIterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx
import pytest
from fastapi import FastAPI

from service.api.documentation import description
from service.app import create_app
from service.connecting import open_database
from service.settings import load
from service.store import keys
from tests.api.test_hostile import LINE_ITEM

pytestmark = [
    pytest.mark.anyio,
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]

KEPT = Path(__file__).with_name("access.md")
OWN, FOREIGN = "own-garden", "foreign-garden"
SCOPES = ("bid", "report", "read", "operate")
CALLERS = ("none", "unknown", *SCOPES, "admin", "limited")
ORDER = {"reason": "A test."}
ITEM = "/v1/line-items/{line_item_id}"
# What orders nothing: it changes no line item, no key and no rate.
NO_ORDERS = (
    *("POST /v1/bids", "POST /v1/bids/batch", "POST /v1/outcomes", "POST /v1/rehearsals"),
    *(f"POST {ITEM}/hindsight", f"POST {ITEM}/tripwires/preview"),
)
DEFAULTED = ("POST /v1/line-items", f"PATCH {ITEM}")
REHEARSED = {"policies": [{"name": "as is"}], "market": {"kind": "iid"}, "rounds": 10, "seeds": 1}
# What each call sends, about the line item named; None for a call without a body.
BODIES: dict[str, Any] = {
    "POST /v1/bids": lambda name: {"line_item": name},
    "POST /v1/bids/batch": lambda name: {"opportunities": [{"line_item": name}]},
    "POST /v1/line-items": lambda name: {**LINE_ITEM, "id": name},
    f"PATCH {ITEM}": lambda _: {"name": "Another name", **ORDER},
    f"POST {ITEM}/retract": lambda _: {"event_ids": ["cv-1"], **ORDER},
    f"POST {ITEM}/rewind": lambda _: {"to": 0, **ORDER},
    f"POST {ITEM}/reverse": lambda _: {"amount": "0.01", **ORDER},
    f"POST {ITEM}/reconcile": lambda _: {"spent": "0.01", **ORDER},
    "POST /v1/keys": lambda _: {"name": "another", "scopes": ["read"], **ORDER},
    "POST /v1/keys/{key_id}/rotate": lambda _: ORDER,
    **{f"POST {ITEM}/{order}": lambda _: ORDER for order in ("freeze", "thaw", "reset", "close")},
    **{f"POST {ITEM}/quarantine/{{number}}/{do}": lambda _: ORDER for do in ("retry", "release")},
    **{f"POST {path}": lambda _: ORDER for path in ("/v1/freeze", "/v1/thaw")},
    "POST /v1/keys/{key_id}/end": lambda _: ORDER,
    "POST /v1/rates": lambda _: {"currency": "USD", "into": "EUR", "rate": "0.9", **ORDER},
    "POST /v1/rehearsals": lambda name: {**REHEARSED, "line_item": name},
    "POST /v1/rehearsals/{rehearsal_id}/cancel": lambda _: ORDER,
    f"POST {ITEM}/hindsight": lambda _: {"flat_price_cpm": 1.0},
    f"POST {ITEM}/tripwires/preview": lambda _: {},
}


@dataclass
class Door:
    """The running app, a key for every kind of caller, and a ticket of each line item."""

    app: FastAPI
    http: httpx.AsyncClient
    bearers: dict[str, str | None]
    tickets: dict[str, str]

    async def call(
        self, route: str, caller: str, name: str, body: dict[str, Any] | None = None
    ) -> httpx.Response:
        """Make the honest call of a route, about a line item, as one kind of caller."""
        method, _, path = route.partition(" ")
        path = path.replace("{line_item_id}", name).replace("{number}", "1")
        path = path.replace("{key_id}", "0123456789ab").replace("{name}", "swagger-ui.css")
        path = path.replace("{rehearsal_id}", "1").replace("{source}", "a").replace("{ticket}", "t")
        headers = {"If-Match": '"1"'}
        if (bearer := self.bearers[caller]) is not None:
            headers["Authorization"] = f"Bearer {bearer}"
        if route == "POST /v1/outcomes":
            body = {"outcomes": [{"kind": "lost", "ticket": self.tickets[name]}]}
        elif body is None and route in BODIES:
            body = BODIES[route](name)
        return await self.http.request(method, path, headers=headers, json=body)


@pytest.fixture(name="door")
async def _door(migrated_url: str) -> AsyncIterator[Door]:
    settings = load({"BIDKEEL_DATABASE_URL": migrated_url, "BIDKEEL_DEADLINE_MS_MAX": "5000"})
    database = open_database(settings)
    bearers: dict[str, str | None] = {"none": None, "unknown": "x" * 43}
    for scope in (*SCOPES, "admin"):
        bearers[scope] = keys.add(database, scope, [scope])[1]
    bearers["limited"] = keys.add(database, "limited", [*SCOPES], line_items=[OWN])[1]
    database.close()
    app = create_app(settings)
    transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
    async with (
        app.router.lifespan_context(app),
        httpx.AsyncClient(transport=transport, base_url="http://test") as http,
    ):
        door = Door(app, http, bearers, {})
        for name in (OWN, FOREIGN):
            made = await door.call("POST /v1/line-items", "admin", name)
            assert made.status_code == 201, made.text
            bid = {"line_item": name, "deadline_ms": 5000}
            headers = {"Authorization": f"Bearer {bearers['admin']}"}
            priced = await http.post("/v1/bids", json=bid, headers=headers)
            door.tickets[name] = priced.json()["ticket"]
        yield door


def routes(app: FastAPI) -> list[str]:
    """Every route that the app has, as method and path, those of its parts too."""
    found, waiting = set(), list[Any](app.routes)
    while waiting:
        route = waiting.pop()
        part = getattr(route, "original_router", route)
        waiting += getattr(part, "routes", None) or []
        found |= {f"{method} {route.path}" for method in getattr(route, "methods", None) or ()}
    # The page for people asks for a cookie of its own; the tests of the page hold that.
    found = {r for r in found if not r.startswith("HEAD") and " /watch" not in r and r != "GET /"}
    assert len(found) > 25
    return sorted(found, key=lambda route: (route.partition(" ")[2], route))


def documented(app: FastAPI) -> dict[str, str]:
    """The scope that the description of the API names for each route."""
    return {
        f"{method.upper()} {path}": operation["summary"].rpartition("Scope: ")[2].rstrip(".")
        for path, operations in description(app)["paths"].items()
        for method, operation in operations.items()
        if "Scope: " in operation["summary"]
    }


def verdict(answer: httpx.Response) -> str:
    """Let in, or refused with which status and code; a refusal of a row counts as one."""
    told = answer.json() if "json" in answer.headers.get("content-type", "") else {}
    rows = [*(told.get("answers") or []), *(told.get("results") or [])]
    codes = [row.get("code") or (row.get("error") or {}).get("code") for row in rows]
    if (refused := told.get("code")) in ("no_key", "unknown_key", "scope_missing"):
        return f"{answer.status_code}"
    if refused in ("key_is_limited", "no_such_line_item"):
        return f"{answer.status_code} {refused}"
    assert answer.status_code < 500, answer.text
    return f"row {codes[0]}" if codes and codes[0] is not None else "in"


async def made(door: Door) -> str:
    """The table: routes down, callers across."""
    lines = [
        "| route | " + " | ".join([*CALLERS, "limited, foreign line item"]) + " |",
        "|---" * (len(CALLERS) + 2) + "|",
    ]
    scopes = documented(door.app)
    for route in routes(door.app):
        cells = [verdict(await door.call(route, caller, OWN)) for caller in CALLERS]
        opened = {caller for caller, cell in zip(CALLERS, cells, strict=True) if cell == "in"}
        scope = scopes.get(route)
        assert opened - {"limited"} == ({scope, "admin"} if scope else {*CALLERS[:-1]}), route
        foreign = await door.call(route, "limited", FOREIGN)
        assert FOREIGN not in foreign.text, route
        lines.append(f"| {route} | " + " | ".join([*cells, verdict(foreign)]) + " |")
    return "\n".join([*lines, ""])


async def test_every_route_opens_to_whom_the_table_says(door: Door, tmp_path: Path) -> None:
    """What the running app does is the table kept beside, route by route and key by key."""
    now = tmp_path / "access.md"
    now.write_text(await made(door))
    assert now.read_text() == KEPT.read_text(), f"look at it, then copy {now} to {KEPT}"


async def test_nobody_reaches_a_route_without_a_key_but_the_open_ones(door: Door) -> None:
    """What is open to everybody is a short list, and holds nothing of anybody."""
    found = [
        route for route in routes(door.app) if not (await door.call(route, "none", OWN)).is_error
    ]
    assert found == [
        *("GET /docs", "GET /docs/start.js", "GET /docs/{name}"),
        *("GET /health/live", "GET /health/ready", "GET /metrics", "GET /openapi.json"),
    ]


async def test_a_foreign_line_item_answers_like_one_that_is_not(door: Door) -> None:
    """Byte for byte but the request's name, so that nobody can ask which line items there are."""
    for route in routes(door.app):
        if "{line_item_id}" in route or route in ("POST /v1/bids", "POST /v1/bids/batch"):
            foreign = await door.call(route, "limited", FOREIGN)
            nowhere = await door.call(route, "limited", "nowhere")
            texts = [answer.text.partition('"request_id"')[0] for answer in (foreign, nowhere)]
            assert foreign.status_code == nowhere.status_code, route
            assert texts[0] == texts[1], route


async def test_a_limited_key_lists_competes_and_pools_only_its_own(door: Door) -> None:
    """Lists are filtered; foreign names among competitors or kin are unknown line items."""
    headers = {"Authorization": f"Bearer {door.bearers['limited']}", "If-Match": '"1"'}
    listed = await door.http.get("/v1/line-items", headers=headers)
    assert [row["id"] for row in listed.json()["line_items"]] == [OWN]
    after = await door.http.get("/v1/line-items?after=own-garden", headers=headers)
    assert after.json() == {"line_items": [], "next": None}
    calls: list[tuple[str, str, dict[str, Any]]] = [
        ("POST", "/v1/bids", {"line_items": [OWN, FOREIGN]}),
        ("POST", "/v1/line-items", {**LINE_ITEM, "id": OWN, "kin": [FOREIGN]}),
        ("PATCH", f"/v1/line-items/{OWN}", {"kin": [FOREIGN]}),
    ]
    for method, path, body in calls:
        answer = await door.http.request(method, path, json=body, headers=headers)
        assert (answer.status_code, answer.json()["code"]) == (404, "no_such_line_item"), path


async def test_outcomes_of_foreign_line_items_are_refused_by_row(door: Door) -> None:
    """By ticket and by ref; its own row stands beside them, and money of others does not move."""
    headers = {"Authorization": f"Bearer {door.bearers['limited']}"}
    admin = {"Authorization": f"Bearer {door.bearers['admin']}"}
    won = {"kind": "won", "ticket": door.tickets[FOREIGN], "clearing_cpm": 0.1}
    told = await door.http.post("/v1/outcomes", json={"outcomes": [won]}, headers=admin)
    ref = told.json()["results"][0]["ref"]
    value = {"kind": "value", "value": "0.1", "event_id": "e"}
    rows = [
        {"kind": "lost", "ticket": door.tickets[OWN]},
        {"kind": "billed", "ticket": door.tickets[FOREIGN], "clearing_cpm": 0.1},
        {**value, "ticket": door.tickets[FOREIGN]},
        {**value, "ref": ref},
        {**value, "ref": "A" * 22},
    ]
    told = await door.http.post("/v1/outcomes", json={"outcomes": rows}, headers=headers)
    found = [(row["status"], row.get("code")) for row in told.json()["results"]]
    assert found == [
        ("recorded", None),
        ("refused", "no_such_line_item"),
        ("refused", "no_such_line_item"),
        ("refused", "no_such_ref"),
        ("refused", "no_such_ref"),
    ]
    refused = await door.http.get("/v1/refusals", headers=admin)
    counted = {row["route"]: row["count"] for row in refused.json()["refusals"]}
    assert counted == {"POST /v1/outcomes": 3}


async def test_refusals_are_counted_by_key_route_and_code(door: Door) -> None:
    """A thousand knocks are one row; nothing that was sent stands in it."""
    for _ in range(5):
        await door.call("GET /v1/line-items", "none", OWN)
        await door.call("GET /v1/line-items", "unknown", OWN)
        await door.call("GET /v1/line-items", "bid", OWN)
        await door.call(f"GET {ITEM}", "limited", FOREIGN)
        await door.call("POST /v1/freeze", "limited", FOREIGN)
    headers = {"Authorization": f"Bearer {door.bearers['admin']}"}
    told = await door.http.get("/v1/refusals", headers=headers)
    counts: dict[tuple[object, ...], int] = {}
    for row in told.json()["refusals"]:
        place = (row["key_name"], row["route"], row["code"])
        counts[place] = counts.get(place, 0) + row["count"]
    assert counts == {
        (None, "GET /v1/line-items", "no_key"): 5,
        (None, "GET /v1/line-items", "unknown_key"): 5,
        ("bid", "GET /v1/line-items", "scope_missing"): 5,
        ("limited", f"GET {ITEM}", "foreign_line_item"): 5,
        ("limited", "POST /v1/freeze", "key_is_limited"): 5,
    }
    assert FOREIGN not in told.text
    assert "xxx" not in told.text


async def test_every_order_wants_a_reason(door: Door) -> None:
    """Whatever changes something and is no bid or outcome; creating and changing have a default."""
    asked = 0
    for route in routes(door.app):
        if not route.startswith(("POST", "PATCH")) or route in NO_ORDERS or "/openrtb" in route:
            continue
        for spoilt in ({"reason": " "}, {"reason": "x" * 501}, {}):
            told = {k: v for k, v in BODIES[route](OWN).items() if k != "reason"} | spoilt
            answer = await door.call(route, "admin", OWN, told)
            if not spoilt and route in DEFAULTED:
                continue
            assert (answer.status_code, answer.json()["field"]) == (422, "reason"), route
            asked += 1
    assert asked > 40
    headers = {"Authorization": f"Bearer {door.bearers['admin']}"}
    one = await door.http.get(f"/v1/line-items/{OWN}", headers=headers)
    raised = {"budget": "5000.00"}
    match = {**headers, "If-Match": one.headers["etag"]}
    answer = await door.http.patch(f"/v1/line-items/{OWN}", json=raised, headers=match)
    assert (answer.status_code, answer.json()["code"]) == (409, "needs_confirmation")
    assert answer.json()["confirm"] == "budget=5000.00"
    sure = {**raised, "confirm": answer.json()["confirm"]}
    answer = await door.http.patch(f"/v1/line-items/{OWN}", json=sure, headers=match)
    assert (answer.status_code, answer.json()["code"]) == (422, "reason_missing")
    sure["reason"] = "The season begins."
    answer = await door.http.patch(f"/v1/line-items/{OWN}", json=sure, headers=match)
    assert (answer.status_code, answer.json()["budget"]) == (200, "5000.00")


async def test_a_key_is_made_used_renewed_and_ended_over_http(door: Door) -> None:
    """Shown once, limited as asked, both texts in the overlap, none at the end; all journalled."""
    admin = {"Authorization": f"Bearer {door.bearers['admin']}"}
    wish = {"name": "desk", "scopes": ["read"], "line_items": [OWN], "reason": "A new desk."}
    once = {**admin, "Idempotency-Key": "k1"}
    first = await door.http.post("/v1/keys", json=wish, headers=once)
    again = await door.http.post("/v1/keys", json=wish, headers=once)
    assert (first.status_code, again.json()) == (201, {**first.json(), "key": None})
    assert first.headers["cache-control"] == "no-store"
    key_id, old = first.json()["id"], first.json()["key"]
    turned = await door.http.post(
        f"/v1/keys/{key_id}/rotate", json={"reason": "It is old.", "overlap_s": 60}, headers=admin
    )
    new = turned.json()["key"]
    for bearer in (old, new):
        seen = await door.http.get(
            f"/v1/line-items/{OWN}", headers={"Authorization": f"Bearer {bearer}"}
        )
        assert seen.status_code == 200
    await door.app.state.stories.operator.admitting.flush()
    (row,) = [
        row
        for row in (await door.http.get("/v1/keys", headers=admin)).json()["keys"]
        if row["id"] == key_id
    ]
    assert (row["state"], row["line_items"], row["last_used_at"] is None) == ("live", [OWN], False)
    assert row["old_text_until"] == turned.json()["old_text_until"]
    ended = await door.http.post(f"/v1/keys/{key_id}/end", json=ORDER, headers=admin)
    assert ended.status_code == 200
    await door.app.state.stories.operator._catalog.follow()
    for bearer in (old, new):
        gone = await door.http.get(
            f"/v1/line-items/{OWN}", headers={"Authorization": f"Bearer {bearer}"}
        )
        assert gone.json()["code"] == "unknown_key"


@pytest.mark.parametrize(
    ("changes", "status", "code"),
    [
        ({"scopes": ["admin"], "line_items": ["a"]}, 422, "admin_is_not_limited"),
        ({"expires_at": "2020-01-01T00:00:00Z"}, 422, "expired_already"),
        ({"scopes": ["root"]}, 422, "bad_field"),
        ({"line_items": []}, 422, "bad_field"),
        ({"line_items": ["a b"]}, 422, "bad_field"),
        ({"reason": " "}, 422, "bad_field"),
        ({"reason": None}, 422, "bad_field"),
    ],
)
async def test_a_key_that_makes_no_sense_is_refused(
    door: Door, changes: dict[str, object], status: int, code: str
) -> None:
    """With its code; no key is made."""
    headers = {"Authorization": f"Bearer {door.bearers['admin']}"}
    before = (await door.http.get("/v1/keys", headers=headers)).json()
    wish = {"name": "desk", "scopes": ["read"], "reason": "A test.", **changes}
    answer = await door.http.post("/v1/keys", json=wish, headers=headers)
    assert (answer.status_code, answer.json()["code"]) == (status, code)
    after = (await door.http.get("/v1/keys", headers=headers)).json()
    assert [row["id"] for row in after["keys"]] == [row["id"] for row in before["keys"]]
