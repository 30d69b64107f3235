"""Hindsight and evidence on the page: certain, bounded and assumed in boxes of their own."""

from __future__ import annotations

import time

import anyio
import pytest

from tests.watch.conftest import GARDEN, Visitor

pytestmark = [
    pytest.mark.anyio,
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]
LOGGED_S_MAX = 20
BACK = "/watch/line-items/garden/hindsight"


@pytest.fixture
async def signed_in(visitor: Visitor) -> Visitor:
    """Somebody who may only look, before a line item with two wins, a loss and their values."""
    for n, price in enumerate((1, 2, None)):
        bid = await visitor.api("bids", {"line_item": "garden"})
        told = {"kind": "lost"} if price is None else {"kind": "won", "clearing_cpm": price}
        rows = [{"ticket": bid["ticket"], **told}]
        if price is not None:
            value = {"kind": "value", "value": "0.01", "event_id": f"e{n}"}
            rows.append({"ref": bid["ref"], **value})
        await visitor.api("outcomes", {"outcomes": rows})
    await visitor.sign_in(visitor.key("read")[1])
    end, path = time.monotonic() + LOGGED_S_MAX, f"{BACK}?other=bid_cap_cpm&price=8"
    # Decisions are logged a moment after they are made.
    while "over 3 auctions" not in (await visitor.client.get(path)).text:
        assert time.monotonic() < end, "the decisions were not logged"
        await anyio.sleep(0.1)
    return visitor


def box(page: str, name: str) -> str:
    """What stands in one of the boxes."""
    return page.split(f'id="{name}">', 1)[1].split("</div>", 1)[0]


async def test_what_is_certain_stands_apart_from_what_is_not(signed_in: Visitor) -> None:
    """A lower cap is settled by the prices paid: one win stays, one is lost, the loss stays one."""
    answer = await signed_in.client.get(f"{BACK}?other=bid_cap_cpm&price=1.5")
    assert answer.status_code == 200
    certain = box(answer.text, "certain")
    assert "Known for certain" in certain
    # A win for 1 CPM that brought 0.01 EUR, and no other.
    assert "surplus of <b>0.009 EUR</b>" in certain
    assert "Bounded, whatever the market was like" in box(answer.text, "bounded")
    assert "A guess, if" in box(answer.text, "assumed-values_alike")
    assert "Refused:" in box(answer.text, "drawn-off_policy")
    assert "As it was: a surplus" in answer.text


async def test_a_higher_cap_is_bounded_only(signed_in: Visitor) -> None:
    """Whether the loss would have been won nobody knows, and the box says how far that reaches."""
    answer = await signed_in.client.get(f"{BACK}?other=bid_cap_cpm&price=9")
    bounded = box(answer.text, "bounded")
    assert "1 auctions lie between" not in bounded
    assert "between" in bounded
    assert "One auction lies between its worst and its best case" in bounded


async def test_evidence_names_every_method_without_a_score(signed_in: Visitor) -> None:
    """In alphabetical order, with reasons and what each assumes."""
    shown = (await signed_in.client.get(BACK)).text
    assert "never applied by itself" in shown
    names = [part.split("</b>", 1)[0] for part in shown.split('data-label="Method"><b>')[1:]]
    assert names == sorted(names)
    assert "kl-ucbid</b> (in use)" in shown
    assert len(names) == 11
    assert 'id="found"' not in shown


@pytest.mark.parametrize(
    "query",
    [
        *("price=much", "price=0", "price=1&from_at=yesterday", "other=flat_price_cpm&price=-1"),
        "price=1&from_at=2026-12-01T02:00:00Z&until_at=2026-12-01T01:00:00Z",
    ],
)
async def test_a_bad_question_comes_back_with_a_sentence(visitor: Visitor, query: str) -> None:
    """As the API would refuse it, with the form still filled in."""
    await visitor.sign_in(visitor.key("read")[1])
    answer = await visitor.client.get(f"{BACK}?{query}")
    assert answer.status_code == 422
    assert 'id="problem"' in answer.text
    assert 'id="found"' not in answer.text


async def test_a_foreign_line_item_has_no_past(visitor: Visitor) -> None:
    """To a limited key it is like one that nobody has; signed out, it is the door."""
    assert (await visitor.client.get(BACK)).status_code == 303
    await visitor.api("line-items", GARDEN | {"id": "orchard"})
    await visitor.sign_in(visitor.key("read", line_items=["garden"])[1])
    query = "?other=bid_cap_cpm&price=1"
    foreign = await visitor.client.get(f"/watch/line-items/orchard/hindsight{query}")
    nobodys = await visitor.client.get(f"/watch/line-items/nobodys/hindsight{query}")
    assert foreign.status_code == nobodys.status_code == 404
    assert foreign.content == nobodys.content
