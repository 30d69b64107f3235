"""The pages as a browser gets them: what they show, what they escape, what they forbid."""

from __future__ import annotations

import json
import re

import pytest
from sqlalchemy import text

from service.watch.pages import KEPT, POLICY, PRIVATE
from tests.watch.conftest import GARDEN, Visitor

pytestmark = pytest.mark.anyio
ON_SQLITE = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
HOSTILE = "<script>alert(1)</script>\"'><img src=x onerror=alert(2)>"
INLINE = re.compile(
    r"<style|<script>|<script(?![^>]*\bsrc=)|\son[a-z]+=|\sstyle=|javascript:", re.I
)
PAGES = (
    *("/watch", "/watch/now", "/watch/line-items/garden", "/watch/line-items/garden/now"),
    *(f"/watch/line-items/garden/{order}" for order in ("freeze", "thaw", "reset", "rewind")),
    *("/watch/line-items/garden/retract", "/watch/all/freeze", "/watch/all/thaw"),
    *("/watch/rehearsals", "/watch/rehearsals/now", "/watch/line-items/garden/hindsight"),
)


@pytest.fixture
async def signed_in(visitor: Visitor) -> Visitor:
    """A visitor who may give orders."""
    await visitor.sign_in(visitor.key("read", "operate")[1])
    return visitor


async def bid_and_win(visitor: Visitor) -> None:
    """One open bid, and one that was won and brought something."""
    first = await visitor.api("bids", {"line_item": "garden"})
    await visitor.api("bids", {"line_item": "garden"})
    won = {"ticket": first["ticket"], "kind": "won", "clearing_cpm": 2.5}
    await visitor.api("outcomes", {"outcomes": [won]})
    value = {"ref": first["ref"], "kind": "value", "value": "0.02", "event_id": "e"}
    await visitor.api("outcomes", {"outcomes": [value]})


async def test_the_front_page_answers_in_one_look(signed_in: Visitor) -> None:
    """The sentence, the money, the holds and the last journal line, on each database."""
    await bid_and_win(signed_in)
    shown = (await signed_in.client.get("/watch")).text
    assert "None of 1 line items needs you." in shown
    for told in ("0.0025 EUR", "of 20.00 EUR", "bidding", "Zurich", "create", "Freeze all"):
        assert told in shown
    assert re.search(r"<li>win \d+ s ago</li>", shown)
    assert re.search(r"<li>bill none</li>", shown)
    assert re.search(r"until \d\d:\d\d:\d\d Zurich \(\d\d:\d\d:\d\d UTC\)", shown)


async def test_the_page_of_a_line_item_has_every_chart_as_text(signed_in: Visitor) -> None:
    """Each figure stands beside a sentence and a table, and the script gets the same, as JSON."""
    await bid_and_win(signed_in)
    shown = (await signed_in.client.get("/watch/line-items/garden")).text
    answer = await signed_in.client.get("/watch/line-items/garden/charts")
    told = json.loads(answer.text)
    assert list(told) == ["spend", "prices", "value", "wins", "delays"]
    for name, one in told.items():
        assert f'id="chart-{name}"' in shown
        assert one["says"]
    assert told["spend"]["figure"]["data"][0]["y"][-1] == 0.0025
    assert shown.count("as a table</summary>") >= 2


FINDING = """INSERT INTO tripwire_finding (line_item, rule, action, saw, numbers, since_ms,
    raised_ms, seen_ms, froze_ms, thawed_ms) VALUES
    ('garden', 'value_size', 'freeze', :saw, '{}', :since, :since, :since, :froze, :thawed)"""


@ON_SQLITE
async def test_what_a_tripwire_saw_stands_above_with_its_runbook(signed_in: Visitor) -> None:
    """What it saw, whether it froze, what to do; the way to retract has its moment filled in."""
    row = {"saw": "values <b>5</b> times as large", "since": 1_764_600_000_000}
    row |= {"froze": 1, "thawed": None}
    signed_in.database.write(lambda c: c.execute(text(FINDING), row))
    for path in ("/watch/line-items/garden", "/watch/line-items/garden/now"):
        shown = (await signed_in.client.get(path)).text
        told = shown.split('id="tripwire-value_size"', 1)[1].split("</article>", 1)[0]
        assert "Values &lt;b&gt;5&lt;/b&gt; times as large." in told
        assert "froze it" in told
        assert "Repair the sender" in told
        assert shown.index("tripwire-value_size") < shown.index("figures-title")
        assert "from_at=2025-12-01T14%3A40%3A00.000Z" in told
    front = (await signed_in.client.get("/watch")).text
    assert "tripwire, value size: values &lt;b&gt;5&lt;/b&gt; times as large" in front
    cleared = text("UPDATE tripwire_finding SET cleared_ms = 2")
    signed_in.database.write(lambda c: c.execute(cleared))
    assert 'id="tripwires"' not in (await signed_in.client.get("/watch/line-items/garden")).text


@ON_SQLITE
@pytest.mark.parametrize("path", PAGES)
async def test_every_page_is_private_and_runs_nothing_of_others(
    signed_in: Visitor, path: str
) -> None:
    """Nobody keeps it, nobody frames it, and neither script nor style stands in it."""
    answer = await signed_in.client.get(path)
    assert answer.status_code == 200
    for name, said in PRIVATE.items():
        assert answer.headers[name] == said
    assert "unsafe" not in POLICY
    assert INLINE.findall(answer.text) == []
    links = re.findall(r'(?:href|src|action)="([^"]*)"', answer.text)
    assert [link for link in links if not link.startswith(("/watch", "#main"))] == []


@ON_SQLITE
async def test_hostile_words_stay_words(signed_in: Visitor) -> None:
    """Whatever is in a name, a reason, a source or a search is shown and never run."""
    await signed_in.api("line-items", GARDEN | {"id": "b", "name": HOSTILE})
    await signed_in.api("line-items/b/freeze", {"reason": HOSTILE})
    await signed_in.api("line-items/garden/freeze", {"reason": HOSTILE})
    await signed_in.api("freeze", {"reason": HOSTILE})
    paths = [*PAGES, "/watch/line-items/b", f"/watch?q={HOSTILE}", "/watch/line-items/b/freeze"]
    paths.append(f"/watch/line-items/garden/rewind?to={HOSTILE}")
    for path in paths:
        shown = (await signed_in.client.get(path)).text
        assert "<script>alert" not in shown
        assert "<img src=x" not in shown
    assert "&lt;script&gt;alert(1)" in (await signed_in.client.get("/watch")).text


@ON_SQLITE
async def test_a_search_and_a_page_too_far_still_answer(signed_in: Visitor) -> None:
    """Rubbish in the address gives the first page, one too far the last."""
    for query in ("page=99", "page=-1", "page=x", "page=9999999999", "q=%00", "q=zebra&page=3"):
        answer = await signed_in.client.get(f"/watch?{query}")
        assert answer.status_code == 200
    assert "No line item matches." in answer.text


@ON_SQLITE
async def test_what_is_not_there_is_a_page_that_says_so(signed_in: Visitor) -> None:
    """An unknown line item, order or file is no error of ours."""
    for path in (
        *("/watch/line-items/none", "/watch/line-items/none/freeze", "/watch/all/reset"),
        *("/watch/line-items/garden/sell", "/watch/files/1/routes.py", "/watch/files/1/%2e%2e"),
    ):
        answer = await signed_in.client.get(path)
        assert answer.status_code == 404, path
        assert answer.headers["content-security-policy"] == POLICY or "problem" in answer.text


@ON_SQLITE
@pytest.mark.parametrize("encoding", ["gzip", "identity"])
async def test_files_are_ours_and_kept(visitor: Visitor, encoding: str) -> None:
    """The library, script and styles come from this service, for a year, packed where it helps."""
    door = (await visitor.client.get("/watch/sign-in")).text
    paths = re.findall(r'"(/watch/files/[^"]+)"', door)
    assert len(paths) >= 3
    library = "/watch/files/0/plotly.min.js"
    for path in [*paths, library]:
        answer = await visitor.client.get(path, headers={"Accept-Encoding": encoding})
        assert answer.status_code == 200
        assert answer.headers["cache-control"] == KEPT["Cache-Control"]
        assert (answer.headers.get("content-encoding") == "gzip") is (encoding == "gzip")
    assert len(answer.content) > 10**6


@ON_SQLITE
async def test_the_root_leads_to_the_page(visitor: Visitor) -> None:
    """Whoever types only the host wants to watch."""
    answer = await visitor.client.get("/")
    assert (answer.status_code, answer.headers["location"]) == (303, "/watch")


@ON_SQLITE
async def test_who_may_only_look_gets_no_buttons(visitor: Visitor) -> None:
    """Neither links nor forms of orders, and the addresses refuse."""
    await visitor.sign_in(visitor.key("read")[1])
    for path in ("/watch", "/watch/line-items/garden"):
        shown = (await visitor.client.get(path)).text
        assert "/freeze" not in shown
        assert "/rewind" not in shown
    for path in ("/watch/line-items/garden/freeze", "/watch/all/freeze"):
        assert (await visitor.client.get(path)).status_code == 403
