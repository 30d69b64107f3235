"""Ids of requests: taken when sane, made otherwise, and said in header, problem and log."""

from __future__ import annotations

import json
import logging
import re
from collections.abc import AsyncIterator, Iterator

import httpx
import pytest

from service import request_ids
from service.app import create_app
from service.commands.logs import JsonLines
from service.settings import load
from service.threads import Threads

pytestmark = pytest.mark.anyio
MADE = re.compile(r"[0-9a-f]{16}")
on_sqlite = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)


@pytest.fixture(name="client")
async def _client(migrated_url: str) -> AsyncIterator[httpx.AsyncClient]:
    app = create_app(load({"BIDKEEL_DATABASE_URL": migrated_url}))
    transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
    async with (
        app.router.lifespan_context(app),
        httpx.AsyncClient(transport=transport, base_url="http://test") as client,
    ):
        yield client


@pytest.fixture(name="lines")
def _lines() -> Iterator[list[dict[str, str]]]:
    """What the service logs meanwhile, as the lines a program reads."""
    said = list[dict[str, str]]()

    class Kept(logging.Handler):
        def emit(self, record: logging.LogRecord) -> None:
            said.append(json.loads(JsonLines().format(record)))

    handler = Kept()
    logging.getLogger().addHandler(handler)
    yield said
    logging.getLogger().removeHandler(handler)


@on_sqlite
@pytest.mark.parametrize("sane", ["a", "op-81f2", "trace:1.2_3", "x" * 64])
async def test_a_sane_id_is_kept(client: httpx.AsyncClient, sane: str) -> None:
    """Header and problem carry the id that the caller knows its request by."""
    answer = await client.post("/v1/bids", headers={"X-Request-Id": sane}, json={})
    assert answer.headers["X-Request-Id"] == answer.json()["request_id"] == sane


@on_sqlite
@pytest.mark.parametrize("odd", ["", " ", "a b", "x" * 65, '{"a":1}', "a\tb", "<script>", "ä"])
async def test_an_odd_id_is_replaced(client: httpx.AsyncClient, odd: str) -> None:
    """What could break a line of the log is not taken, and the request is served all the same."""
    headers = {b"X-Request-Id": odd.encode()}
    answer = await client.get("/health/live", headers=headers)
    assert answer.status_code == 200
    assert MADE.fullmatch(answer.headers["X-Request-Id"])


@on_sqlite
async def test_every_request_has_its_own(client: httpx.AsyncClient) -> None:
    """Two calls on one connection are told apart."""
    names = {(await client.get("/health/live")).headers["X-Request-Id"] for _ in range(5)}
    assert len(names) == 5


@on_sqlite
async def test_an_unexpected_error_is_found_in_the_log_by_its_id(
    client: httpx.AsyncClient, lines: list[dict[str, str]]
) -> None:
    """The answer of the outermost handler carries the id, and so does the line in the log."""

    async def broken(_bearer: str) -> None:
        raise RuntimeError("a fault of ours")

    app = client._transport.app  # type: ignore[attr-defined]
    app.state.stories.operator.key_for = broken
    answer = await client.get("/v1/line-items", headers={"Authorization": "Bearer x"})
    assert answer.status_code == 500
    name = answer.json()["request_id"]
    assert answer.headers["X-Request-Id"] == name
    (line,) = [line for line in lines if "a fault of ours" in line.get("exception", "")]
    assert line["request_id"] == name


async def test_a_thread_of_the_database_works_in_the_same_name(
    lines: list[dict[str, str]],
) -> None:
    """What is logged on the other thread is found by the request that caused it."""
    threads = Threads(1)
    name = request_ids.begin("op-7")
    await threads.run(logging.getLogger("service.there").warning, "a slow row")
    await threads.run_within(5, logging.getLogger("service.there").warning, "a slower row")
    threads.close()
    assert [line["request_id"] for line in lines if line["logger"] == "service.there"] == [
        *(name, name)
    ]


async def test_a_line_of_no_request_has_no_id(lines: list[dict[str, str]]) -> None:
    """Background duties speak for themselves."""
    logging.getLogger("service.clerk").warning("a duty")
    (line,) = [line for line in lines if line["message"] == "a duty"]
    assert "request_id" not in line


@pytest.mark.parametrize(
    ("offered", "taken"),
    [("a", True), ("A.b_c:d-9", True), ("x" * 64, True), ("x" * 65, False), ("", False),
     (None, False), ("a\n", False), ("a b", False), ("\u0661", False)],
)  # fmt: skip
def test_an_id_is_taken_only_when_no_line_could_break(offered: str | None, taken: bool) -> None:
    """Letters, digits and four signs, at most 64; digits of other scripts are no digits."""
    name = request_ids.begin(offered)
    assert (name == offered) is taken
    assert taken or MADE.fullmatch(name)
    assert request_ids.current() == name
