"""Rehearsals on the page: started, shown, cancelled, and kept from whoever they are not for."""

from __future__ import annotations

import json
import time

import anyio
import pytest

from tests.watch.conftest import GARDEN, Visitor, hidden

pytestmark = [
    pytest.mark.anyio,
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]
ALL = "/watch/rehearsals"
SMALL = {
    **{"line_item": "garden", "name": "a try", "market": "iid", "auction": "second"},
    **{"as_it_is": "on", "method_mean": "on", "cap_cpm": "4", "flat_cpm": "2.5"},
    **{"rounds": "200", "seeds": "2"},
}
ENDED_S_MAX = 40


@pytest.fixture
async def signed_in(visitor: Visitor) -> Visitor:
    """A visitor who may give orders."""
    await visitor.sign_in(visitor.key("read", "operate")[1])
    return visitor


async def ended(visitor: Visitor, place: str) -> str:
    """The part of a rehearsal's page that is renewed, once it says that all is over."""
    end = time.monotonic() + ENDED_S_MAX
    while time.monotonic() < end:
        shown = await visitor.client.get(f"{place}/now")
        if "data-ended" in shown.text:
            return shown.text
        await anyio.sleep(0.2)
    raise TimeoutError("the rehearsal did not end")


async def test_one_is_started_watched_and_read(signed_in: Visitor) -> None:
    """From the form to the table and the charts, each policy by its name; sent twice, once."""
    shown = (await signed_in.client.get(f"{ALL}?line_item=garden")).text
    assert 'value="garden"' in shown
    fields = {**hidden(shown, ALL), **SMALL}
    answer = await signed_in.client.post(ALL, data=fields)
    assert answer.status_code == 303, answer.text
    place = answer.headers["location"]
    assert (await signed_in.client.post(ALL, data=fields)).headers["location"] == place
    assert "done" in await ended(signed_in, place)
    shown = (await signed_in.client.get(place)).text
    for policy in ("as it is", "mean", "cap 4 CPM", "flat 2.5 CPM"):
        assert f"<b>{policy}</b>" in shown
        assert policy == "as it is" or f"<p>{policy} earned " in shown
    assert "100 % of 1,600 auctions" in shown
    assert "EUR" in shown
    assert "Assumed:" in shown
    told = json.loads((await signed_in.client.get(f"{place}/charts")).text)
    assert list(told) == ["surplus", "spend", "bid"]
    for name, one in told.items():
        assert f'id="chart-{name}"' in shown
        assert one["says"] in shown
        assert len(one["figure"]["data"]) == 4
    listed = (await signed_in.client.get(f"{ALL}/now")).text
    assert listed.count('role="row" id="rehearsal-') == 1
    assert "a try" in listed


async def test_one_that_plays_is_cancelled_with_a_reason(signed_in: Visitor) -> None:
    """Without a reason it plays on; with one it ends, and the journal says why."""
    answer = await signed_in.send(ALL, **SMALL | {"rounds": "900,000", "seeds": "5"})
    place = answer.headers["location"]
    shown = await signed_in.client.get(place)
    assert "<progress" in shown.text
    refused = await _cancel(signed_in, place, " ")
    assert refused == 422
    assert await _cancel(signed_in, place, "it takes too long") == 303
    assert "cancelled" in await ended(signed_in, place)
    assert 'id="cancel"' not in (await signed_in.client.get(place)).text
    assert "it takes too long" in (await signed_in.client.get("/watch")).text


async def _cancel(visitor: Visitor, place: str, reason: str) -> int:
    shown = await visitor.client.get(place)
    fields = hidden(shown.text, f"{place}/cancel") | {"reason": reason}
    return (await visitor.client.post(f"{place}/cancel", data=fields)).status_code


@pytest.mark.parametrize(
    ("changed", "said"),
    [
        ({"line_item": "nobodys"}, "line item"),
        ({"line_item": "no such id"}, "line item"),
        ({"rounds": "many"}, "rounds"),
        ({"rounds": "9"}, "rounds"),
        ({"seeds": "9" * 30}, "seeds"),
        ({"market": "moon"}, "market"),
        ({"market": "own_log"}, "no decision"),
        ({"as_it_is": "", "method_mean": "", "cap_cpm": "", "flat_cpm": ""}, "policies"),
        ({"cap_cpm": "much"}, "cap"),
        ({"flat_cpm": "99"}, "above the bid cap"),
    ],
)
async def test_a_bad_wish_comes_back_with_a_sentence(
    signed_in: Visitor, changed: dict[str, str], said: str
) -> None:
    """As the API would refuse it, with everything still filled in, and nothing is started."""
    answer = await signed_in.send(ALL, **SMALL | changed)
    assert answer.status_code == 422
    problem = answer.text.split('id="problem">', 1)[1].split("</p>", 1)[0]
    assert said in problem.lower()
    assert 'value="a try"' in answer.text
    assert "There is no rehearsal to show." in answer.text


async def test_who_may_only_look_starts_and_cancels_nothing(visitor: Visitor) -> None:
    """There is no form, and one sent all the same is refused, as is one without its token."""
    await visitor.sign_in(visitor.key("read")[1])
    shown = (await visitor.client.get(ALL)).text
    assert 'id="begin"' not in shown
    token = hidden(shown, "/watch/sign-out")["token"]
    for path in (ALL, f"{ALL}/1/cancel"):
        assert (await visitor.client.post(path, data=SMALL | {"token": token})).status_code == 403
        assert (await visitor.client.post(path, data=SMALL)).status_code == 403


async def test_a_limited_key_has_only_rehearsals_of_its_own(visitor: Visitor) -> None:
    """Others are neither listed, shown, drawn, cancelled nor started, like those that are not."""
    await visitor.api("line-items", GARDEN | {"id": "orchard"})
    market, policies = {"kind": "iid"}, [{"name": "now"}]
    wish = {"market": market, "policies": policies, "rounds": 10, "seeds": 1}
    for name in ("orchard", "garden"):
        await visitor.api("rehearsals", {**wish, "name": f"of-{name}", "line_item": name})
    key_id, bearer = visitor.key("read", "operate", line_items=["garden"])
    await visitor.sign_in(bearer)
    listed = (await visitor.client.get(ALL)).text
    assert ("of-garden" in listed, "of-orchard" in listed) == (True, False)
    for part in ("", "/now", "/charts"):
        foreign = await visitor.client.get(f"{ALL}/1{part}")
        nobodys = await visitor.client.get(f"{ALL}/99{part}")
        assert foreign.status_code == nobodys.status_code == 404
        assert foreign.content == nobodys.content
        assert (await visitor.client.get(f"{ALL}/2{part}")).status_code == 200
    token = hidden(listed, "/watch/sign-out")["token"]
    said = {"token": token, "reason": "not mine"}
    assert (await visitor.client.post(f"{ALL}/1/cancel", data=said)).status_code == 404
    answer = await visitor.send(ALL, **SMALL | {"line_item": "orchard"})
    nobodys = await visitor.send(ALL, **SMALL | {"line_item": "nobodys"})
    assert answer.status_code == nobodys.status_code == 422
    sentence = 'id="problem">There is no line item with this id.'
    assert sentence in answer.text
    assert sentence in nobodys.text
    codes = {(key, code) for key, _, code in await visitor.refused()}
    assert codes == {(key_id, "foreign_line_item")}


async def test_whoever_is_signed_out_sees_none(visitor: Visitor) -> None:
    """List, page and parts send to the door, and nothing is started or cancelled."""
    for path in (ALL, f"{ALL}/now", f"{ALL}/1", f"{ALL}/1/now", f"{ALL}/1/charts"):
        answer = await visitor.client.get(path)
        assert answer.status_code == 303
        assert answer.content == b""
    for path in (ALL, f"{ALL}/1/cancel"):
        assert (await visitor.client.post(path, data=SMALL)).status_code == 303
