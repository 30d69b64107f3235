"""The express routes answer as the framework's own way does, but for the name of the request."""

from __future__ import annotations

from collections.abc import AsyncIterator
from typing import Any

import httpx
import pytest
from fastapi import FastAPI

from service.api.express import PATHS
from service.app import create_app
from service.connecting import open_database
from service.settings import load
from service.store import keys
from tests.api.test_hostile import LINE_ITEM

pytestmark = [
    pytest.mark.anyio,
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]

BID = {"line_item": LINE_ITEM["id"], "test": True, "deadline_ms": 5000}
CALLS: list[tuple[str, str, dict[str, Any]]] = [
    ("POST", "/v1/bids", {"json": {"line_item": "nobody"}}),
    ("POST", "/v1/bids", {"json": {"line_item": 7}}),
    ("POST", "/v1/bids", {"content": b"{"}),
    ("POST", "/v1/bids", {"json": BID, "headers": {"Authorization": "Bearer wrong"}}),
    ("POST", "/v1/bids", {"json": BID, "headers": {"Content-Type": "text/plain"}}),
    ("POST", "/v1/bids/batch", {"json": {"opportunities": [{"line_item": "nobody"}, 7]}}),
    ("POST", "/v1/bids/batch", {"json": {"opportunities": []}}),
    ("POST", "/v1/outcomes", {"json": {"outcomes": [{"kind": "won", "ticket": "x"}]}}),
    ("POST", "/v1/outcomes", {"content": b"x" * 5_000_000}),
    ("GET", "/v1/bids", {}),
    ("DELETE", "/v1/outcomes", {}),
    ("POST", "/v1/bids/", {"json": BID}),
]


@pytest.fixture(name="both")
async def _both(migrated_url: str) -> AsyncIterator[tuple[httpx.AsyncClient, httpx.AsyncClient]]:
    """One service, asked once past the framework and once through it."""
    settings = load({"BIDKEEL_DATABASE_URL": migrated_url, "BIDKEEL_DEADLINE_MS_MAX": "5000"})
    database = open_database(settings)
    _, bearer = keys.add(database, "tests", ["admin"])
    database.close()
    app = create_app(settings)

    async def around(scope: Any, receive: Any, send: Any) -> None:
        await FastAPI.__call__(app, scope, receive, send)

    headers = {"Authorization": f"Bearer {bearer}"}
    async with app.router.lifespan_context(app):
        clients = [
            httpx.AsyncClient(
                transport=httpx.ASGITransport(app=one, raise_app_exceptions=False),
                base_url="http://test",
                headers=headers,
            )
            for one in (app, around)
        ]
        made = await clients[0].post("/v1/line-items", json=LINE_ITEM)
        assert made.status_code == 201, made.text
        yield clients[0], clients[1]
        for client in clients:
            await client.aclose()


def seen(answer: httpx.Response) -> tuple[int, dict[str, str], str]:
    """What a caller can tell apart: status, headers and body without the request's own name."""
    headers = {name: value for name, value in answer.headers.items() if name != "x-request-id"}
    name = answer.headers["x-request-id"]
    return answer.status_code, headers, answer.text.replace(name, "")


@pytest.mark.parametrize(("method", "path", "sent"), CALLS)
async def test_both_ways_answer_alike(
    both: tuple[httpx.AsyncClient, httpx.AsyncClient], method: str, path: str, sent: dict[str, Any]
) -> None:
    """Whatever is sent, refusals and wrong methods too."""
    quick, slow = [await client.request(method, path, **sent) for client in both]
    assert seen(quick) == seen(slow)


async def test_a_price_is_a_price_either_way(
    both: tuple[httpx.AsyncClient, httpx.AsyncClient],
) -> None:
    """Tickets differ, for no two bids share one; all else is the same."""
    told = [(await client.post("/v1/bids", json=BID)).json() for client in both]
    kept = [{k: v for k, v in one.items() if k not in ("ticket", "ref")} for one in told]
    assert kept[0] == kept[1]
    assert all(one["ticket"] for one in told)


async def test_every_express_path_is_there(
    both: tuple[httpx.AsyncClient, httpx.AsyncClient],
) -> None:
    """A path that is renamed would quietly fall back to the slow way."""
    transport = both[0]._transport
    assert isinstance(transport, httpx.ASGITransport)
    app: Any = transport.app
    assert set(app.express) == set(PATHS)


async def test_pieces_and_a_hang_up_end_alike(
    both: tuple[httpx.AsyncClient, httpx.AsyncClient],
) -> None:
    """A body in two pieces is one body; one that ends early is told to be so."""
    half, rest = b'{"line_item": "nob', b'ody"}'
    gone = {"type": "http.disconnect"}
    whole = [_piece(half, more=True), _piece(rest, more=False)]
    for client in both:
        transport = client._transport
        assert isinstance(transport, httpx.ASGITransport)
        bearer = client.headers["Authorization"]
        assert await told(transport.app, bearer, whole) == 404
        assert await told(transport.app, bearer, [whole[0], gone]) == 400


def _piece(body: bytes, *, more: bool) -> dict[str, Any]:
    return {"type": "http.request", "body": body, "more_body": more}


async def told(app: Any, bearer: str, messages: list[dict[str, Any]]) -> int:
    """The status after these messages from the socket."""
    coming, answers = iter(messages), list[dict[str, Any]]()

    async def receive() -> dict[str, Any]:
        return next(coming)

    async def send(message: dict[str, Any]) -> None:
        answers.append(message)

    names = {"method": "POST", "path": "/v1/bids", "raw_path": b"/v1/bids", "root_path": ""}
    headers = [(b"authorization", bearer.encode())]
    scope = {"type": "http", "query_string": b"", "headers": headers, **names}
    await app(scope, receive, send)
    return int(answers[0]["status"])


async def test_an_error_nobody_expected_is_a_problem_too(
    both: tuple[httpx.AsyncClient, httpx.AsyncClient], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Told as such, without what went wrong."""
    transport = both[0]._transport
    assert isinstance(transport, httpx.ASGITransport)
    app: Any = transport.app

    async def broken(*_: object) -> None:
        raise ZeroDivisionError("canary-7a")

    monkeypatch.setattr(app.state.stories.bidder, "bid", broken)
    quick, slow = [await client.post("/v1/bids", json=BID) for client in both]
    assert seen(quick) == seen(slow)
    assert (quick.status_code, quick.json()["code"]) == (500, "internal")
    assert "canary" not in quick.text
