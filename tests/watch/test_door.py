"""Signing in by key: what it takes, what it gives, how it ends, and who is kept out."""

from __future__ import annotations

import pytest

from service.store import keys
from service.watch.door import COOKIE
from tests.watch.conftest import Visitor, hidden, visiting

pytestmark = [
    pytest.mark.anyio,
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]
PAGES = (
    *("/watch", "/watch/now", "/watch/line-items/garden", "/watch/line-items/garden/now"),
    *("/watch/line-items/garden/charts", "/watch/line-items/garden/freeze", "/watch/all/freeze"),
)


@pytest.mark.parametrize("path", PAGES)
async def test_whoever_is_signed_out_is_sent_to_the_door(visitor: Visitor, path: str) -> None:
    """No page shows anything, and the door knows where one wanted to go."""
    answer = await visitor.client.get(path)
    assert answer.status_code == 303
    assert answer.headers["location"].startswith("/watch/sign-in?next=%2Fwatch")
    assert answer.content == b""


async def test_a_part_of_a_page_is_refused_and_not_exchanged_for_the_door(visitor: Visitor) -> None:
    """The script is told with a status, or it would put the door into the page."""
    answer = await visitor.client.get("/watch/now", headers={"X-Part": "1"})
    assert answer.status_code == 401


@pytest.mark.parametrize("method", ["post"])
@pytest.mark.parametrize("path", ["/watch/line-items/garden/freeze", "/watch/all/freeze"])
async def test_no_order_is_taken_from_whoever_is_signed_out(
    visitor: Visitor, path: str, method: str
) -> None:
    """The form goes to the door, and nothing is frozen."""
    answer = await visitor.client.request(method, path, data={"reason": "x"})
    assert answer.status_code == 303
    assert visitor.database.read(lambda c: keys.listed(c))
    state = await visitor.client.get(
        "/v1/line-items/garden/state", headers={"Authorization": f"Bearer {visitor.admin}"}
    )
    assert state.json()["status"] == "open"


async def test_a_key_that_may_read_opens_the_page(visitor: Visitor) -> None:
    """The cookie is kept from scripts and other sites, and sent only to the page."""
    _, bearer = visitor.key("read")
    answer = await visitor.sign_in(bearer, "/watch/line-items/garden")
    assert (answer.status_code, answer.headers["location"]) == (303, "/watch/line-items/garden")
    cookie = next(c for c in answer.headers.get_list("set-cookie") if c.startswith(COOKIE))
    assert {"HttpOnly", "SameSite=strict", "Path=/watch"} <= set(cookie.split("; "))
    assert "Secure" not in cookie
    assert bearer not in cookie
    shown = await visitor.client.get("/watch")
    assert shown.status_code == 200
    assert "An invented garden" in shown.text
    assert "freeze-all" not in shown.text


async def test_over_tls_the_cookie_stays_there(migrated_url: str) -> None:
    """Once sent over TLS it never leaves in clear."""
    async with visiting(migrated_url, "https") as visitor:
        answer = await visitor.sign_in(visitor.key("read")[1])
        assert all("Secure" in cookie for cookie in answer.headers.get_list("set-cookie")[:1])
        assert (await visitor.client.get("/watch")).status_code == 200


@pytest.mark.parametrize("scope", ["bid", "report"])
async def test_a_key_without_reading_stays_outside(visitor: Visitor, scope: str) -> None:
    """It is told the same as an unknown key."""
    known = await visitor.sign_in(visitor.key(scope)[1])
    unknown = await visitor.sign_in("no such key")
    assert known.status_code == unknown.status_code == 401
    sentence = "No live key with the scope read has this text."
    assert sentence in known.text
    assert sentence in unknown.text
    assert COOKIE not in visitor.client.cookies


async def test_a_session_ends_with_its_key(visitor: Visitor) -> None:
    """The cookie is still there, and opens nothing any more."""
    key_id, bearer = visitor.key("read", "operate")
    await visitor.sign_in(bearer)
    keys.end(visitor.database, key_id)
    assert (await visitor.client.get("/watch")).status_code == 303


async def test_signing_out_takes_the_cookie_away(visitor: Visitor) -> None:
    """Only with the token of the session: another site cannot sign anybody out."""
    await visitor.sign_in(visitor.key("read")[1])
    refused = await visitor.client.post("/watch/sign-out", data={"token": "wrong"})
    assert refused.status_code == 403
    front = await visitor.client.get("/watch")
    fields = hidden(front.text, "/watch/sign-out")
    assert (await visitor.client.post("/watch/sign-out", data=fields)).status_code == 303
    assert COOKIE not in visitor.client.cookies


async def test_the_sixth_wrong_key_waits(visitor: Visitor) -> None:
    """Even a good key waits then, so that nobody learns by trying."""
    for _ in range(5):
        assert (await visitor.sign_in("wrong")).status_code == 401
    answer = await visitor.sign_in(visitor.key("read")[1])
    assert answer.status_code == 429
    assert 0 < int(answer.headers["retry-after"]) <= 60


async def test_the_form_of_another_browser_is_no_way_in(visitor: Visitor) -> None:
    """A token without the cookie of the door it came with signs nobody in."""
    shown = await visitor.client.get("/watch/sign-in")
    fields = hidden(shown.text, "/watch/sign-in") | {"key": visitor.key("read")[1]}
    visitor.client.cookies.clear()
    answer = await visitor.client.post("/watch/sign-in", data=fields)
    assert answer.status_code == 403
    assert COOKIE not in visitor.client.cookies


@pytest.mark.parametrize(
    "onward",
    [
        *("https://elsewhere.example/watch", "//elsewhere.example/watch", "/v1/bids", "", "watch"),
        *("/watchful", "/watch/\\elsewhere.example", "/watch\r\nX: y", "javascript:1"),
    ],
)
async def test_the_door_leads_nowhere_else(visitor: Visitor, onward: str) -> None:
    """Whoever sends a link to the door cannot choose a place outside the page."""
    answer = await visitor.sign_in(visitor.key("read")[1], onward)
    assert (answer.status_code, answer.headers["location"]) == (303, "/watch")


@pytest.mark.parametrize(
    ("headers", "body"),
    [
        ({"Content-Type": "application/json"}, b"{}"),
        ({"Content-Type": "application/x-www-form-urlencoded"}, b"a=1&a=2"),
        ({"Content-Type": "application/x-www-form-urlencoded"}, b"\xff=%ff"),
        ({"Content-Type": "application/x-www-form-urlencoded"}, b"&".join([b"a=1"] * 99)),
        ({"Content-Type": "application/x-www-form-urlencoded"}, b"a=" + b"x" * 200_000),
        ({"Content-Type": "application/x-www-form-urlencoded"}, b""),
    ],
)
async def test_what_is_no_form_is_refused(
    visitor: Visitor, headers: dict[str, str], body: bytes
) -> None:
    """Another type, a field twice, no UTF-8, too much: a page that says so, never an error."""
    answer = await visitor.client.post("/watch/sign-in", content=body, headers=headers)
    assert 400 <= answer.status_code < 500
    assert answer.headers["content-type"].startswith("text/html")


async def test_a_form_from_another_site_is_refused(visitor: Visitor) -> None:
    """The browser says where it stood, whatever token it brings."""
    await visitor.sign_in(visitor.key("read", "operate")[1])
    path = "/watch/line-items/garden/freeze"
    shown = await visitor.client.get(path)
    fields = hidden(shown.text, path) | {"reason": "forged"}
    headers = {"Sec-Fetch-Site": "cross-site"}
    answer = await visitor.client.post(path, data=fields, headers=headers)
    assert answer.status_code == 403
    assert "came from elsewhere" in answer.text
