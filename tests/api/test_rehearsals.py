"""The routes of rehearsals hand on what was asked and answer in the words of callers."""

from __future__ import annotations

from collections.abc import AsyncIterator

import httpx
import pytest

from service.api.express import Service
from service.api.routes import install
from service.operating import Key
from tests.api.routed import FORM, ORDER, Orders, Stories

pytestmark = pytest.mark.anyio

BODY = {"name": "try", "config": FORM, "policies": [{"name": "now"}], "market": {"kind": "iid"}}


@pytest.fixture
def stories() -> Stories:
    """Fresh stories."""
    return Stories()


@pytest.fixture
async def client(stories: Stories) -> AsyncIterator[httpx.AsyncClient]:
    """A caller with the scope admin."""
    app = Service(docs_url=None, redoc_url=None, openapi_url=None)
    app.state.stories = stories
    install(app)
    headers = {"Authorization": "Bearer admin"}
    transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
    async with httpx.AsyncClient(
        transport=transport, base_url="http://test", headers=headers
    ) as client:
        yield client


async def test_a_rehearsal_is_taken_on_and_has_a_place(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """202 with where to read it, who asked, and the key of a repeat."""
    headers = {"Idempotency-Key": "once"}
    answer = await client.post("/v1/rehearsals", json=BODY, headers=headers)
    assert (answer.status_code, answer.headers["location"]) == (202, "/v1/rehearsals/7")
    assert answer.json() == {"id": "7", "state": "queued", "created_at": "1970-01-01T00:00:00Z"}
    assert stories.rehearsals.calls == [("ask", "try", 1, "Ann Example (k1)", "once")]


async def test_a_bad_one_is_refused_by_its_field(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """422 with the path; nothing is asked for."""
    answer = await client.post("/v1/rehearsals", json={**BODY, "rounds": 1})
    assert (answer.status_code, answer.json()["field"]) == (422, "rounds")
    answer = await client.post("/v1/rehearsals", json={**BODY, "surprise": 1})
    assert answer.status_code == 422
    assert stories.rehearsals.calls == []


async def test_one_is_read_with_money_as_text(client: httpx.AsyncClient) -> None:
    """Amounts are decimal strings, what is not known is null; an unknown id is 404."""
    answer = await client.get("/v1/rehearsals/7")
    assert answer.json()["result"] == {"policies": [{"spend": {"mean": "1.00", "error": None}}]}
    for name in ("8", "x", "9" * 30):
        assert (await client.get(f"/v1/rehearsals/{name}")).status_code == 404


async def test_a_page_says_where_the_next_one_begins(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """A full page names its last number; a short one is the end."""
    full = (await client.get("/v1/rehearsals?limit=2")).json()
    assert (len(full["rehearsals"]), full["next"]) == (2, 7)
    last = (await client.get("/v1/rehearsals?limit=2&before=7")).json()
    assert (last["rehearsals"], last["next"]) == ([], None)
    assert stories.rehearsals.calls == [("page", None, 2, None), ("page", 7, 2, None)]


async def test_a_cancel_carries_who_and_why(client: httpx.AsyncClient, stories: Stories) -> None:
    """The reason goes to the journal by the story."""
    answer = await client.post("/v1/rehearsals/7/cancel", json=ORDER)
    assert answer.json() == {"id": "7", "state": "cancelled"}
    assert stories.rehearsals.calls == [("cancel", 7, "A test.", "Ann Example (k1)")]


class OfTheOrchard(Orders):
    """Every key may do all, but only to the orchard."""

    async def key_for(self, bearer: str) -> Key | None:
        """A key limited to one line item."""
        return Key("k2", "Ann Example", frozenset({"read", "operate"}), frozenset({"orchard"}))


async def test_a_limited_key_rehearses_only_its_own(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """Others are neither asked for, read, cancelled nor listed, and the tries are counted."""
    stories.operator = OfTheOrchard()
    of = {**BODY, "line_item": "garden"}
    del of["config"]
    for body, status in ((of, 404), (BODY, 403), ({**of, "line_item": "orchard"}, 202)):
        assert (await client.post("/v1/rehearsals", json=body)).status_code == status
    assert (await client.get("/v1/rehearsals/7")).status_code == 404
    assert (await client.post("/v1/rehearsals/7/cancel", json=ORDER)).status_code == 404
    await client.get("/v1/rehearsals?limit=1")
    asked, page = stories.rehearsals.calls
    assert (asked[0], page) == ("ask", ("page", None, 1, frozenset({"orchard"})))
    counted = [code for _, _, code in stories.operator.admitting.told]
    assert counted == ["foreign_line_item", "key_is_limited", *["foreign_line_item"] * 2]
