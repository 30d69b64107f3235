"""Orders by hand: what the forms say before, what is done, what the journal keeps."""

from __future__ import annotations

from typing import Any

import pytest
from sqlalchemy import text

from tests.watch.conftest import Visitor, hidden

pytestmark = [
    pytest.mark.anyio,
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]
ITEM = "/watch/line-items/garden"


@pytest.fixture
async def signed_in(visitor: Visitor) -> Visitor:
    """A visitor who may give orders."""
    await visitor.sign_in(visitor.key("read", "operate")[1])
    return visitor


def journal(visitor: Visitor) -> list[Any]:
    """What was journalled since line item and key were made."""
    rows = text("SELECT * FROM journal WHERE action NOT IN ('create', 'key_add') ORDER BY number")
    return list(visitor.database.read(lambda c: c.execute(rows).all()))


async def won(visitor: Visitor, value: str) -> None:
    """One impression that was won and brought so much."""
    bid = await visitor.api("bids", {"line_item": "garden"})
    outcome = {"ticket": bid["ticket"], "kind": "won", "clearing_cpm": 1}
    await visitor.api("outcomes", {"outcomes": [outcome]})
    told = {"ref": bid["ref"], "kind": "value", "value": value, "event_id": bid["ref"][:8]}
    await visitor.api("outcomes", {"outcomes": [told]})


async def state(visitor: Visitor) -> dict[str, Any]:
    """The state of the line item, from the API."""
    headers = {"Authorization": f"Bearer {visitor.admin}"}
    answer = await visitor.client.get("/v1/line-items/garden/state", headers=headers)
    return dict(answer.json())


async def test_before_a_freeze_it_says_what_is_exposed(signed_in: Visitor) -> None:
    """Open bids, their cost, and until when, in the zone of the line item and in UTC."""
    await signed_in.api("bids", {"line_item": "garden"})
    shown = (await signed_in.client.get(f"{ITEM}/freeze")).text
    exposed = shown.split('id="exposed">', 1)[1].split("</p>", 1)[0]
    assert "may still cost" in exposed
    assert "EUR" in exposed
    assert "Zurich (" in exposed


async def test_a_freeze_is_in_force_and_journalled(signed_in: Visitor) -> None:
    """The journal names the key, the page and the reason."""
    answer = await signed_in.send(f"{ITEM}/freeze", reason="  prices look wrong ")
    assert answer.status_code == 200
    assert "In force: every live worker has passed it." in answer.text
    (row,) = journal(signed_in)
    assert (row.action, row.line_item, row.reason) == ("freeze", "garden", "prices look wrong")
    assert row.actor.startswith("anna (")
    assert row.actor.endswith("), watch page")
    assert (await state(signed_in))["status"] == "frozen"
    assert "1 frozen by people" in (await signed_in.client.get("/watch")).text


async def test_a_thaw_lists_what_it_lifts(signed_in: Visitor) -> None:
    """The form names the freeze, and afterwards there is none."""
    await signed_in.api("line-items/garden/freeze", {"reason": "a look"})
    assert "a look" in (await signed_in.client.get(f"{ITEM}/thaw")).text
    answer = await signed_in.send(f"{ITEM}/thaw", reason="all is well")
    assert "In force" in answer.text
    assert (await state(signed_in))["status"] == "open"


async def test_sent_twice_an_order_counts_once(signed_in: Visitor) -> None:
    """An impatient hand sends the same form again and gets the first answer."""
    path = f"{ITEM}/reset"
    fields = hidden((await signed_in.client.get(path)).text, path)
    fields |= {"reason": "begin again", "step": "do"}
    first = await signed_in.client.post(path, data=fields)
    second = await signed_in.client.post(path, data=fields)
    assert first.text == second.text
    assert len(journal(signed_in)) == 1


@pytest.mark.parametrize("order", ["freeze", "thaw", "reset"])
async def test_without_a_reason_nothing_happens(signed_in: Visitor, order: str) -> None:
    """The form comes back and says what is missing."""
    answer = await signed_in.send(f"{ITEM}/{order}", reason="   ")
    assert answer.status_code == 422
    assert 'id="problem"' in answer.text
    assert "reason" in answer.text
    assert journal(signed_in) == []


async def test_without_the_token_nothing_happens(signed_in: Visitor) -> None:
    """A form that did not come from a page of this session is refused."""
    for token in ("", "0" * 64):
        data = {"reason": "forged", "token": token}
        answer = await signed_in.client.post(f"{ITEM}/freeze", data=data)
        assert answer.status_code == 403
    assert journal(signed_in) == []


async def test_who_may_only_look_gives_no_order(visitor: Visitor) -> None:
    """Even with a good token."""
    await visitor.sign_in(visitor.key("read")[1])
    front = (await visitor.client.get("/watch")).text
    token = hidden(front, "/watch/sign-out")["token"]
    for path in (f"{ITEM}/freeze", "/watch/all/freeze"):
        answer = await visitor.client.post(path, data={"reason": "x", "token": token})
        assert answer.status_code == 403
    assert journal(visitor) == []


async def test_everything_is_frozen_and_thawed_by_one_switch(signed_in: Visitor) -> None:
    """The front page says so, with who and why; thawing all lifts only the switch."""
    await signed_in.api("line-items/garden/freeze", {"reason": "its own"})
    await signed_in.send("/watch/all/freeze", reason="fire drill")
    shown = (await signed_in.client.get("/watch")).text
    assert "Everything is frozen" in shown
    assert "fire drill" in shown
    await signed_in.send("/watch/all/thaw", reason="drill over")
    shown = (await signed_in.client.get("/watch")).text
    assert "Everything is frozen" not in shown
    assert [f["source"] for f in (await state(signed_in))["freezes"]] == ["person"]


async def test_a_rewind_is_previewed_and_then_done(signed_in: Visitor) -> None:
    """The preview changes nothing; the second press does what it said."""
    await won(signed_in, "0.01")
    await won(signed_in, "0.09")
    path = f"{ITEM}/rewind?to=1"
    page = (await signed_in.client.get(path)).text
    assert 'value="1"' in page
    fields = hidden(page, f"{ITEM}/rewind") | {"to": "1", "reason": "a bad night"}
    preview = await signed_in.client.post(f"{ITEM}/rewind", data=fields | {"step": "preview"})
    assert "lessons would be cancelled" in preview.text
    assert "a bad night" in preview.text
    assert "values of 0.10 EUR and costs of 0.002 EUR" in preview.text
    assert journal(signed_in) == []
    fields |= hidden(preview.text, f"{ITEM}/rewind")
    done = await signed_in.client.post(f"{ITEM}/rewind", data=fields | {"step": "do"})
    assert "lessons were cancelled" in done.text
    assert "published at seq" in done.text
    assert [row.action for row in journal(signed_in)] == ["rewind"]
    assert (await state(signed_in))["learner"]["wins"] == 0


async def test_a_reset_is_previewed_too(signed_in: Visitor) -> None:
    """What would be forgotten is told first; nothing is, until the second press."""
    await won(signed_in, "0.01")
    preview = await signed_in.send(f"{ITEM}/reset", reason="begin again")
    assert "Forgotten would be values of 0.01 EUR" in preview.text
    assert journal(signed_in) == []
    done = await signed_in.send(f"{ITEM}/reset", reason="begin again", step="do")
    assert "begins afresh at seq" in done.text
    assert [row.action for row in journal(signed_in)] == ["reset"]


async def test_lessons_of_a_source_are_retracted(signed_in: Visitor) -> None:
    """Named by source, previewed with the default step, then done."""
    await won(signed_in, "0.05")
    said = {"source": "default", "part": "value", "reason": "a broken pixel"}
    preview = await signed_in.send(f"{ITEM}/retract", **said)
    assert "would be cancelled" in preview.text
    done = await signed_in.send(f"{ITEM}/retract", **said, step="do")
    assert "were cancelled" in done.text
    assert (await state(signed_in))["certainty"]["known"] == 0


@pytest.mark.parametrize(
    ("order", "fields"),
    [
        ("rewind", {"to": ""}),
        ("rewind", {"to": "yesterday"}),
        ("rewind", {"to": "99999"}),
        ("rewind", {"to": "9" * 39}),
        ("retract", {}),
        ("retract", {"source": "a", "refs": "b"}),
        ("retract", {"refs": "not-a-ref"}),
        ("retract", {"from_at": "2026-12-01 02:00"}),
        ("retract", {"source": "a", "part": "half"}),
    ],
)
async def test_a_bad_order_comes_back_with_a_sentence(
    signed_in: Visitor, order: str, fields: dict[str, str]
) -> None:
    """As the API would refuse it, and with everything still filled in."""
    answer = await signed_in.send(f"{ITEM}/{order}", reason="why not", step="do", **fields)
    assert answer.status_code == 422
    assert 'id="problem"' in answer.text
    assert "why not" in answer.text
    assert journal(signed_in) == []
