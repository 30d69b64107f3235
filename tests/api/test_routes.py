"""Routes ask for the right scope, call one story and hand its answer on."""

from __future__ import annotations

from collections.abc import AsyncIterator

import httpx
import pytest

from service.api.edge import Edge
from service.api.express import Service
from service.api.routes import install
from service.decision.opportunity import Opportunity
from tests.api.routed import FORM, ORDER, Stories

pytestmark = pytest.mark.anyio


@pytest.fixture
def stories() -> Stories:
    """Fresh stories."""
    return Stories()


@pytest.fixture
def app(stories: Stories) -> Service:
    """An app of these stories alone."""
    app = Service(docs_url=None, redoc_url=None, openapi_url=None)
    app.state.stories = stories
    install(app)
    return app


@pytest.fixture
async def client(app: Service) -> AsyncIterator[httpx.AsyncClient]:
    """A caller with the scope admin."""
    headers = {"Authorization": "Bearer admin"}
    transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
    async with httpx.AsyncClient(
        transport=transport, base_url="http://test", headers=headers
    ) as client:
        yield client


SCOPES = [
    ("POST", "/v1/bids", "bid"),
    ("POST", "/v1/bids/batch", "bid"),
    ("POST", "/v1/outcomes", "report"),
    ("POST", "/v1/line-items", "operate"),
    ("GET", "/v1/line-items", "read"),
    ("GET", "/v1/line-items/a", "read"),
    ("PATCH", "/v1/line-items/a", "operate"),
    ("GET", "/v1/line-items/a/state", "read"),
    ("GET", "/v1/line-items/a/curve", "read"),
    *(("POST", f"/v1/line-items/a/{order}", "operate") for order in ("freeze", "thaw", "reset")),
    ("POST", "/v1/freeze", "operate"),
    ("POST", "/v1/thaw", "operate"),
    *(
        ("POST", f"/v1/line-items/a/{order}", "operate")
        for order in ("retract", "rewind", "reverse", "reconcile", "close")
    ),
    ("GET", "/v1/line-items/a/quarantine", "read"),
    *(
        ("GET", f"/v1/line-items/a/{name}", "read")
        for name in ("stream", "ledger", "lessons", "decisions", "journal", "chart")
    ),
    ("GET", "/v1/journal", "read"),
    ("POST", "/v1/line-items/a/hindsight", "read"),
    ("GET", "/v1/line-items/a/evidence", "read"),
    ("POST", "/v1/rates", "operate"),
    ("GET", "/v1/rates", "read"),
]
# What has no form of ours: its body is the standard's.
STANDARD = [
    ("POST", "/openrtb/a/bids", "bid"),
    ("POST", "/openrtb/a/explain", "read"),
    ("POST", "/v1/rehearsals", "operate"),
    ("GET", "/v1/rehearsals", "read"),
    ("GET", "/v1/rehearsals/7", "read"),
    ("POST", "/v1/rehearsals/7/cancel", "operate"),
]


@pytest.mark.parametrize(("method", "path", "scope"), [*SCOPES, *STANDARD])
async def test_each_route_opens_to_its_scope_alone(
    client: httpx.AsyncClient, method: str, path: str, scope: str
) -> None:
    """Its own scope and admin pass; every other scope is 403, an unknown key 401."""
    for bearer in ("bid", "report", "read", "operate", "admin", "nothing"):
        headers = {"Authorization": f"bearer {bearer}"}
        answer = await client.request(method, path, headers=headers)
        if bearer == "nothing":
            assert answer.status_code == 401
        else:
            assert (answer.status_code == 403) == (bearer not in (scope, "admin")), bearer


async def test_a_bid_goes_to_the_bidder_and_back(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """The answer of the contract, with the names of what was not used."""
    body = {"request_id": "op-1", "line_item": "a", "floor_cpm": 0.4, "shiny": 1}
    answer = await client.post("/v1/bids", json=body)
    assert answer.status_code == 200
    assert answer.json() == {
        **{"request_id": "op-1", "line_item": "a", "bid_cpm": 1.0, "pass": None, "ticket": "t"},
        **{"ref": "r", "method": "flat", "set_by": "value", "snapshot": 1, "warnings": ["shiny"]},
    }
    assert stories.bidder.asked == [Opportunity("a", "op-1", floor=400_000)]


async def test_an_unknown_line_item_is_404(client: httpx.AsyncClient) -> None:
    """Alone it is the whole answer."""
    answer = await client.post("/v1/bids", json={"line_item": "b"})
    assert (answer.status_code, answer.json()["code"]) == (404, "no_such_line_item")


async def test_a_batch_answers_each_row_in_its_place(client: httpx.AsyncClient) -> None:
    """Good, malformed and unknown rows keep their order, and the call stays 200."""
    rows = [{"line_item": "a"}, 7, {"line_item": "b"}, {"line_item": "a", "request_id": "last"}]
    answer = await client.post("/v1/bids/batch", json={"opportunities": rows})
    assert answer.status_code == 200
    one, two, three, four = answer.json()["answers"]
    assert (one["bid_cpm"], four["request_id"]) == (1.0, "last")
    assert (two["error"]["code"], three["error"]["code"]) == ("bad_field", "no_such_line_item")


async def test_outcomes_answer_each_row_in_its_place(client: httpx.AsyncClient) -> None:
    """A refused row stands between recorded ones."""
    rows = [{"kind": "lost", "ticket": "t1"}, {"kind": "won", "ticket": "x", "clearing_cpm": ""}]
    rows.append({"kind": "lost", "ticket": "t2"})
    answer = await client.post("/v1/outcomes", json={"outcomes": rows})
    results = answer.json()["results"]
    assert [result["status"] for result in results] == ["recorded", "refused", "recorded"]
    assert [result["ref"] for result in results] == ["t1", None, "t2"]
    assert results[1]["code"] == "bad_price"


async def test_outcomes_without_a_database_are_503(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """Perhaps recorded: the caller is told when to send again."""
    stories.feedback.away = True
    answer = await client.post("/v1/outcomes", json={"outcomes": [{"kind": "lost", "ticket": "t"}]})
    assert (answer.status_code, answer.headers["retry-after"]) == (503, "1")


async def test_a_new_line_item_is_201_with_its_place_and_version(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """Location, ETag, the defaults of form and story, and who made it."""
    headers = {"Idempotency-Key": "once"}
    answer = await client.post(
        "/v1/line-items", json={**FORM, "confirm": "learning_cost"}, headers=headers
    )
    assert answer.status_code == 201
    assert (answer.headers["location"], answer.headers["etag"]) == ("/v1/line-items/a", '"1"')
    assert {"grace_s", "value.typical"} <= set(answer.json()["defaults"])
    told = ("create", "a", "learning_cost", "Ann Example (k1)", "once")
    assert stories.operator.calls == [told]


async def test_a_page_says_where_the_next_one_begins(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """A full page names its last id; a short one is the end."""
    full = (await client.get("/v1/line-items?limit=1")).json()
    assert ([row["id"] for row in full["line_items"]], full["next"]) == (["a"], "a")
    last = (await client.get("/v1/line-items?limit=1&after=a")).json()
    assert (last["line_items"], last["next"]) == ([], None)
    assert stories.operator.calls == [("list", None, 1), ("list", "a", 1)]


async def test_a_change_needs_the_version_it_is_meant_for(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """428 without If-Match, 412 with an old one, 200 and a new ETag with the current one."""
    path, body = "/v1/line-items/a", {"budget": "6.00", "reason": "A test."}
    assert (await client.patch(path, json=body)).status_code == 428
    assert (await client.patch(path, json=body, headers={"If-Match": '"2"'})).status_code == 412
    answer = await client.patch(path, json=body, headers={"If-Match": '"3"'})
    assert (answer.status_code, answer.headers["etag"]) == (200, '"4"')
    changes = {"budget": 6 * 10**9}
    assert stories.operator.calls[-1] == (
        *("patch", "a", changes, 3, None, "A test.", "Ann Example (k1)"),
    )


async def test_a_change_that_contradicts_what_stays_is_refused(
    client: httpx.AsyncClient, stories: Stories
) -> None:
    """The fields that came are judged together with those that stay."""
    answer = await client.patch(
        "/v1/line-items/a", json={"budget": "0.007"}, headers={"If-Match": '"3"'}
    )
    assert (answer.status_code, answer.json()["field"]) == (422, "bid_cap_cpm")
    assert stories.operator.calls == []


async def test_state_and_line_item_are_read(client: httpx.AsyncClient) -> None:
    """The state has no unit of ours; the line item carries its ETag."""
    state = await client.get("/v1/line-items/a/state")
    assert state.json() == {"line_item": "a", "spent": "1.00"}
    assert (await client.get("/v1/line-items/a")).headers["etag"] == '"3"'


@pytest.mark.parametrize(
    ("path", "told"),
    [
        ("/v1/line-items/a/freeze", ("freeze", "a")),
        ("/v1/line-items/a/thaw", ("thaw", "a")),
        ("/v1/line-items/a/reset", ("reset", "a")),
        ("/v1/freeze", ("freeze", None)),
        ("/v1/thaw", ("thaw", None)),
    ],
)
async def test_orders_carry_reason_actor_and_key(
    client: httpx.AsyncClient, stories: Stories, path: str, told: tuple[str, str | None]
) -> None:
    """Who orders what and why goes to the operator; a repeat names itself."""
    for headers, once in (({}, None), ({"Idempotency-Key": "k"}, "k")):
        answer = await client.post(path, json=ORDER, headers=headers)
        assert answer.status_code == 200
        assert stories.operator.calls[-1] == (*told, "A test.", "Ann Example (k1)", once)


async def test_ready_follows_the_service(app: Service, client: httpx.AsyncClient) -> None:
    """503 while starting, ok when all is well, degraded but 200 without a database."""
    stories = app.state.stories
    assert (await client.get("/health/ready")).json() == {"status": "ok"}
    stories.operator.away = True
    degraded = await client.get("/health/ready")
    assert (degraded.status_code, degraded.json()) == (200, {"status": "degraded"})
    app.state.stories = None
    assert (await client.get("/health/ready")).status_code == 503
    assert (await client.get("/health/live")).status_code == 200
    assert (await client.post("/v1/bids", json={"line_item": "a"})).status_code == 503


async def test_health_may_ask_for_a_key_of_its_own(app: Service, client: httpx.AsyncClient) -> None:
    """With the setting, only its key opens health, and no other key does."""
    from pydantic import SecretStr

    app.state.settings = Edge(health_key=SecretStr("watch"))
    assert (await client.get("/health/ready")).status_code == 401
    answer = await client.get("/health/ready", headers={"Authorization": "Bearer watch"})
    assert answer.status_code == 200


async def test_the_settings_limit_bodies_and_rows(app: Service, client: httpx.AsyncClient) -> None:
    """Limits come from the settings of the app."""
    app.state.settings = Edge(body_bytes_max=50, batch_bytes_max=200, batch_rows_max=1)
    long = {"line_item": "a", "request_id": "x" * 50}
    assert (await client.post("/v1/bids", json=long)).status_code == 413
    one = await client.post("/v1/bids/batch", json={"opportunities": [long]})
    assert one.status_code == 200
    two = await client.post("/v1/bids/batch", json={"opportunities": [{"line_item": "a"}] * 2})
    assert two.status_code == 422


async def test_the_page_works_without_the_internet(client: httpx.AsyncClient) -> None:
    """Page, script, style and description come from here, and name no other host."""
    page = await client.get("/docs")
    assert page.status_code == 200
    assert "http" not in page.text
    for name in ("start.js", "swagger-ui.css", "swagger-ui-bundle.js", "favicon-32x32.png"):
        answer = await client.get(f"/docs/{name}")
        assert answer.status_code == 200
        assert len(answer.content) > 50
    assert (await client.get("/docs/swagger-ui.js")).status_code == 404


async def test_the_description_has_every_route_and_form(client: httpx.AsyncClient) -> None:
    """Each route says its scope and its form, every reference leads somewhere."""
    answer = await client.get("/openapi.json")
    document = answer.json()
    for method, path, scope in SCOPES:
        operation = document["paths"][_template(path)][method.lower()]
        assert operation["summary"].endswith(f"Scope: {scope}.")
        assert ("requestBody" in operation) == (method != "GET")
    names = {piece.partition('"')[0] for piece in answer.text.split("#/components/schemas/")[1:]}
    assert names <= document["components"]["schemas"].keys()
    assert '"type":"null"' not in answer.text


def _template(path: str) -> str:
    return path.replace("/a", "/{line_item_id}").replace("/7", "/{rehearsal_id}")
