"""Keys with limits and ends before the page, and the count of whoever was kept out."""

from __future__ import annotations

import re
import time

import pytest

from service.store import keys
from service.watch.door import COOKIE
from tests.watch.conftest import GARDEN, Visitor, hidden

pytestmark = [
    pytest.mark.anyio,
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]
ITEM = "/watch/line-items"
ORDERS = ("freeze", "thaw", "retract", "rewind", "reset")
PARTS = ("", "/now", "/charts", *(f"/{order}" for order in ORDERS))


@pytest.fixture
async def limited(visitor: Visitor) -> tuple[Visitor, str]:
    """Somebody whose key may do all to the garden and nothing to the orchard, and the key's id."""
    await visitor.api("line-items", GARDEN | {"id": "orchard", "name": "Of somebody else"})
    await visitor.api("line-items/orchard/freeze", {"reason": "nobody else's business"})
    key_id, bearer = visitor.key("read", "operate", line_items=["garden"])
    await visitor.sign_in(bearer)
    return visitor, key_id


async def test_a_foreign_line_item_is_as_good_as_none(limited: tuple[Visitor, str]) -> None:
    """Every page of it answers byte for byte like one that nobody has, and is counted."""
    visitor, key_id = limited
    for part in PARTS:
        foreign = await visitor.client.get(f"{ITEM}/orchard{part}")
        nobodys = await visitor.client.get(f"{ITEM}/nobodys{part}")
        assert foreign.status_code == nobodys.status_code == 404, part
        assert foreign.content == nobodys.content, part
        assert (await visitor.client.get(f"{ITEM}/garden{part}")).status_code == 200, part
    counted = {(key, code) for key, _, code in await visitor.refused()}
    assert counted == {(key_id, "foreign_line_item")}


async def test_no_order_reaches_a_foreign_line_item(limited: tuple[Visitor, str]) -> None:
    """Whatever the form says, nothing of it happens."""
    visitor, _ = limited
    token = hidden((await visitor.client.get("/watch")).text, "/watch/sign-out")["token"]
    said = {"reason": "not mine", "token": token, "step": "do", "to": "0", "source": "default"}
    for order in ORDERS:
        answer = await visitor.client.post(f"{ITEM}/orchard/{order}", data=said)
        assert answer.status_code == 404, order
    headers = {"Authorization": f"Bearer {visitor.admin}"}
    told = await visitor.client.get("/v1/line-items/orchard/journal", headers=headers)
    assert [row["action"] for row in told.json()["journal"]] == ["freeze", "create"]


async def test_the_front_page_holds_only_what_the_key_reaches(
    limited: tuple[Visitor, str],
) -> None:
    """Neither row, sentence, search nor journal tells of others, nor of keys."""
    visitor, _ = limited
    for path in ("/watch", "/watch/now", "/watch?q=orchard", "/watch?q=frozen"):
        shown = (await visitor.client.get(path)).text
        assert "Of somebody else" not in shown, path
        assert "nobody else" not in shown, path
        assert "key_add" not in shown, path
    shown = (await visitor.client.get("/watch")).text
    assert "None of 1 line items needs you." in shown
    assert "An invented garden" in shown


async def test_freezing_all_is_for_keys_without_a_limit(limited: tuple[Visitor, str]) -> None:
    """There is no button, the form is refused, and so is whoever sends it all the same."""
    visitor, key_id = limited
    shown = (await visitor.client.get("/watch")).text
    assert "freeze-all" not in shown
    token = hidden(shown, "/watch/sign-out")["token"]
    for path in ("/watch/all/freeze", "/watch/all/thaw"):
        assert (await visitor.client.get(path)).status_code == 403
        said = {"reason": "all of it", "token": token}
        assert (await visitor.client.post(path, data=said)).status_code == 403
    assert (key_id, "POST /watch/all/{order}", "key_is_limited") in await visitor.refused()
    await visitor.api("freeze", {"reason": "fire drill"})
    # What stops its line item too is told, with who and why.
    assert "fire drill" in (await visitor.client.get("/watch/now")).text


async def test_the_orders_of_its_own_line_item_are_its_own(limited: tuple[Visitor, str]) -> None:
    """A limit takes nothing away from what is inside it."""
    visitor, _ = limited
    answer = await visitor.send(f"{ITEM}/garden/freeze", reason="prices look wrong")
    assert "In force" in answer.text


async def test_a_session_ends_when_its_key_expires(visitor: Visitor) -> None:
    """By the clock, though nobody ended the key; the cookie does not live longer either."""
    soon_ms = visitor.database.wall_ms() + 1_000
    key_id, bearer = visitor.key("read", expires_ms=soon_ms)
    answer = await visitor.sign_in(bearer)
    assert answer.status_code == 303
    assert "Max-Age=43200" not in answer.headers["set-cookie"]
    assert await visitor.app.state.stories.watching.key(key_id) is not None
    time.sleep(max(0.0, soon_ms / 1000 - time.time()) + 0.05)
    assert await visitor.app.state.stories.watching.key(key_id) is None
    assert (await visitor.client.get("/watch")).status_code == 303


async def test_an_old_text_of_a_renewed_key_opens_no_longer_than_it_lives(
    visitor: Visitor,
) -> None:
    """It signs in during the overlap, for so long and not for a shift."""
    key_id, bearer = visitor.key("read")
    order = {"overlap_s": 60, "reason": "a new text"}
    await visitor.api(f"keys/{key_id}/rotate", order)
    answer = await visitor.sign_in(bearer)
    assert answer.status_code == 303
    (age_s,) = re.findall(f"{COOKIE}=.*?Max-Age=([0-9]+)", answer.headers["set-cookie"])
    assert 50 <= int(age_s) <= 60


async def test_whoever_is_kept_out_is_counted(visitor: Visitor) -> None:
    """By key, route and code, like the calls of the API; what was sent is kept nowhere."""
    bid_id, bid = visitor.key("bid")
    read_id, read = visitor.key("read")
    await visitor.client.get("/watch")
    await visitor.sign_in("a key that is none")
    await visitor.sign_in(bid)
    await visitor.sign_in(read)
    await visitor.client.get(f"{ITEM}/garden/freeze")
    await visitor.client.post(f"{ITEM}/garden/freeze", data={"reason": "x", "token": "forged"})
    keys.end(visitor.database, read_id)
    await visitor.client.get("/watch")
    assert sorted(await visitor.refused()) == sorted(
        [
            ("", "GET /watch", "no_key"),
            ("", "POST /watch/sign-in", "unknown_key"),
            (bid_id, "POST /watch/sign-in", "scope_missing"),
            (read_id, "GET /watch/line-items/{line_item_id}/{order}", "scope_missing"),
            (read_id, "POST /watch/line-items/{line_item_id}/{order}", "foreign_form"),
            ("", "GET /watch", "session_ended"),
        ]
    )


async def test_a_mistake_in_a_form_is_no_refusal(visitor: Visitor) -> None:
    """Only who may do what is counted, not what somebody mistyped, nor a page that is not."""
    await visitor.sign_in(visitor.key("read", "operate")[1])
    await visitor.send(f"{ITEM}/garden/freeze", reason=" ")
    await visitor.client.get(f"{ITEM}/nobodys")
    assert await visitor.refused() == []
