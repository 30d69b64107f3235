"""Reading back over HTTP, through the real app: pages, filters, tables, refusals."""

from __future__ import annotations

import csv
import io
from typing import Any

import httpx
import pytest
from sqlalchemy import text

from service.store import decisions
from service.store.database import Database
from tests.api.test_taking_back import ONE, ordered, wins
from tests.store.test_decisions import BID, PASS

pytestmark = pytest.mark.anyio

LISTS = {
    f"{ONE}/stream": "stream",
    f"{ONE}/ledger": "entries",
    f"{ONE}/lessons": "lessons",
    f"{ONE}/decisions": "decisions",
    f"{ONE}/journal": "journal",
    "/v1/journal": "journal",
}
DAY = "2026-12-01T00:00:{:02d}Z"
DAY_MS = 1_796_083_200_000


async def read(client: httpx.AsyncClient, path: str, **query: Any) -> Any:
    """A list that is read without a refusal."""
    answer = await client.get(path, params=query)
    assert answer.status_code == 200, answer.text
    return answer.json()


async def table(client: httpx.AsyncClient, path: str, **query: Any) -> list[dict[str, str]]:
    """A list as a table."""
    answer = await client.get(path, params={**query, "format": "csv"})
    assert answer.status_code == 200, answer.text
    assert answer.headers["content-type"] == "text/csv; charset=utf-8"
    return list(csv.DictReader(io.StringIO(answer.text)))


async def all_pages(client: httpx.AsyncClient, path: str, **query: Any) -> list[Any]:
    """Every row, two at a time."""
    page = await read(client, path, limit=2, **query)
    rows = list(page[LISTS[path]])
    while page["next"] is not None:
        page = await read(client, path, limit=2, cursor=page["next"], **query)
        rows += page[LISTS[path]]
    return rows


def log(url: str, *rows: dict[str, Any]) -> None:
    """Log decisions of line item a behind the service's back, a second apart."""
    database = Database(url)
    stamped = [
        {**row, "line_item": "a", "at_ms": DAY_MS + 1000 * n, "request_id": f"op-{n}"}
        for n, row in enumerate(rows)
    ]
    decisions.log(database, stamped)
    database.close()


async def test_pages_join_to_what_the_table_tells(
    app_client: httpx.AsyncClient, migrated_url: str
) -> None:
    """Newest first page by page, oldest first as CSV, the same rows; nothing twice or left out."""
    await wins(app_client, 2)
    log(migrated_url, *[BID] * 3)
    await ordered(app_client, "freeze")
    for path in LISTS:
        rows = await all_pages(app_client, path)
        key = "seq" if "seq" in rows[0] else "number"
        keys = [row[key] for row in rows]
        assert keys == sorted(set(keys), reverse=True)
        # What a worker writes by itself may come between the two readings, at the table's end.
        told = [int(row[key]) for row in await table(app_client, path)]
        assert told[: len(keys)] == keys[::-1], path
        assert rows[-1]["at"].endswith("Z")


async def test_a_cursor_stays_while_rows_are_added(
    app_client: httpx.AsyncClient, migrated_url: str
) -> None:
    """What comes later is newer than the page, and moves nothing on it."""
    await wins(app_client, 0)
    log(migrated_url, *[BID] * 5)
    path = f"{ONE}/decisions"
    first = await read(app_client, path, limit=2)
    second = await read(app_client, path, limit=2, cursor=first["next"])
    log(migrated_url, *[PASS] * 9)
    again = await read(app_client, path, limit=2, cursor=first["next"])
    # Two rows of the second log are of the same seconds as the page, and older than none of it.
    bids = [row for row in again["decisions"] if row["pass"] is None]
    assert bids[0] == second["decisions"][0]


async def test_decisions_are_filtered(app_client: httpx.AsyncClient, migrated_url: str) -> None:
    """By time, kind, reason, what set them and source, each alone and together."""
    await wins(app_client, 0)
    rows = [BID, PASS, {**BID, "set_by": "cap"}, {**PASS, "reason": "under_floor"}]
    log(migrated_url, *rows, {**BID, "source": "south"})
    for query, wanted in (
        ({"kind": "bid"}, [4, 2, 0]),
        ({"kind": "pass"}, [3, 1]),
        ({"kind": "bid,pass"}, [4, 3, 2, 1, 0]),
        ({"reason": "under_floor"}, [3]),
        ({"set_by": "cap"}, [2]),
        ({"source": "south"}, [4]),
        ({"source": "north", "kind": "bid", "from": DAY.format(1)}, [2]),
        ({"from": DAY.format(1), "until": DAY.format(3)}, [2, 1]),
        ({"until": DAY.format(0)}, []),
        ({"from": "2026-12-01T01:00:02+01:00"}, [4, 3, 2]),
    ):
        for found in (
            await all_pages(app_client, f"{ONE}/decisions", **query),
            (await table(app_client, f"{ONE}/decisions", **query))[::-1],
        ):
            assert [row["request_id"] for row in found] == [f"op-{n}" for n in wanted], query
    row = (await read(app_client, f"{ONE}/decisions", source="south"))["decisions"][0]
    assert (row["bid_cpm"], row["floor_cpm"], row["at"]) == (1.234567, 0.4, DAY.format(4))


async def test_the_stream_is_filtered_by_kind_and_time(
    app_client: httpx.AsyncClient, migrated_url: str
) -> None:
    """One kind, several, and only what was stamped inside the span."""
    await wins(app_client, 3)
    path = f"{ONE}/stream"
    everything = await all_pages(app_client, path)
    kinds = [row["kind"] for row in everything if row["kind"] in ("won", "value")]
    assert len(kinds) == 6
    found = await all_pages(app_client, path, kind="value,won")
    assert [row["kind"] for row in found] == kinds
    assert {row["kind"] for row in await all_pages(app_client, path, kind="value")} == {"value"}
    engine = Database(migrated_url)
    # As if the first four had been there since yesterday.
    back = text("UPDATE stream SET at_ms = at_ms - 86400000 WHERE seq <= 4")
    engine.write(lambda connection: connection.execute(back))
    engine.close()
    edge = everything[-5]["at"]
    later = await all_pages(app_client, path, **{"from": edge})
    assert [row["seq"] for row in later] == [row["seq"] for row in everything[:-4]]
    before = await all_pages(app_client, path, until=edge)
    assert [row["seq"] for row in before] == [4, 3, 2, 1]
    win = found[-2] if found[-2]["kind"] == "won" else found[-1]
    assert win["says"]["clearing_cpm"] == 1.0
    assert win["cost"] == "0.001"


async def test_the_ledger_tells_what_is_open_and_what_moved(app_client: httpx.AsyncClient) -> None:
    """Balances, the day, the slice with its end, and the entries behind them."""
    await wins(app_client, 2)
    told = await read(app_client, f"{ONE}/ledger")
    assert (told["currency"], told["balance"]["spent"]) == ("EUR", "0.002")
    sums = {name: float(amount) for name, amount in told["balance"].items()}
    assert sums["free"] == pytest.approx(sums["target"] - sums["spent"] - sums["held"])
    # Without a daily budget a day has no limit to tell.
    assert [(day["spent"], day["target"]) for day in told["days"]] == [("0.002", None)]
    [held] = [one for one in told["slices"] if one["state"] == "open"]
    assert held["expires_at"] < held["closes_at"] < held["billing_closes_at"]
    moved = await all_pages(app_client, f"{ONE}/ledger")
    assert sum(float(row["held"]) for row in moved) == pytest.approx(sums["held"])
    assert sum(float(row["cost"]) for row in moved) == pytest.approx(sums["spent"])
    assert "value" not in {row["kind"] for row in moved}


async def test_lessons_tell_what_each_taught(app_client: httpx.AsyncClient) -> None:
    """A win its round, price and impression; a value its amount; what is retracted nothing."""
    refs = await wins(app_client, 2)
    rows = await all_pages(app_client, f"{ONE}/lessons", kind="won,value")
    value, win = rows[0], rows[1]
    assert value["taught"] == {"value": "0.02", "clipped": False, "instead_of": None}
    assert win["teaches"] == ["market", "value"]
    assert (win["taught"]["impressions"], win["taught"]["clearing_cpm"]) == (1, 1.0)
    await ordered(app_client, "retract", refs=refs[1:], part="value")
    value, win = (await all_pages(app_client, f"{ONE}/lessons", kind="won,value"))[:2]
    assert (value["teaches"], value["cancelled"], value["taught"]) == ([], ["value"], {})
    assert (win["teaches"], win["cancelled"]) == (["market"], ["value"])
    assert "impressions" not in win["taught"]


async def test_the_journal_tells_money_as_callers_write_it(app_client: httpx.AsyncClient) -> None:
    """A configuration in the detail reads as one; actions filter; of one line item only its own."""
    await wins(app_client, 0)
    await ordered(app_client, "freeze")
    [made] = await all_pages(app_client, f"{ONE}/journal", kind="create")
    after = made["detail"]["after"]
    assert (after["budget"], after["bid_cap_cpm"]) == ("5.00", 8.0)
    assert made["reason"] == "a new line item"
    await app_client.post("/v1/freeze", json={"reason": "All."})
    rows = await all_pages(app_client, "/v1/journal")
    assert [row["action"] for row in rows][:2] == ["freeze", "freeze"]
    assert [row["line_item"] for row in rows][:2] == [None, "a"]
    mine = await all_pages(app_client, f"{ONE}/journal", kind="freeze,thaw")
    assert [row["reason"] for row in mine] == ["A test."]


async def test_a_table_runs_no_formula(app_client: httpx.AsyncClient, migrated_url: str) -> None:
    """What others wrote is shown, never computed; units stand in the names of the columns."""
    await wins(app_client, 0)
    bad = ["=1+1", "+1", "-1", "@SUM(A1)", " =1", "fine", 'a,"b']
    log(migrated_url, *[{**BID, "source": source} for source in bad])
    rows = await table(app_client, f"{ONE}/decisions")
    assert [row["source"] for row in rows] == [
        *("'=1+1", "'+1", "'-1", "'@SUM(A1)", "' =1", "fine", 'a,"b'),
    ]
    assert (rows[0]["bid_cpm_eur"], rows[0]["at_utc"]) == ("1.234567", DAY.format(0))


BAD = [
    ("limit=0", "bad_field"),
    ("limit=201", "bad_field"),
    ("limit=1&limit=1", "bad_field"),
    ("form=csv", "bad_field"),
    ("format=xls", "bad_field"),
    ("format=csv&limit=5", "bad_field"),
    ("from=yesterday", "bad_field"),
    ("from=2026-12-01T00:00:00", "bad_field"),
    ("from=2026-12-01T00:00:00Z&until=2026-12-01T00:00:00Z", "bad_field"),
    ("kind=WON", "bad_field"),
    ("cursor=", "bad_cursor"),
    ("cursor=%00", "bad_cursor"),
    ("cursor=c3RyZWFtLng", "bad_cursor"),
    ("cursor=c3RyZWFtLjk5OTk5OTk5OTk5OTk5OTk5OTk", "bad_cursor"),
    ("cursor=bm9ib2R5LjE", "bad_cursor"),
    ("cursor=AAAAA", "bad_cursor"),
]


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_query_that_is_malformed_is_refused(app_client: httpx.AsyncClient) -> None:
    """With a code, on every list, before anything is read."""
    for query, code in BAD:
        for path in LISTS:
            answer = await app_client.get(f"{path}?{query}")
            assert (answer.status_code, answer.json()["code"]) == (422, code), (path, query)


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_cursor_of_another_list_is_refused(app_client: httpx.AsyncClient) -> None:
    """It would name a place that means something else there."""
    await wins(app_client, 1)
    cursor = (await read(app_client, f"{ONE}/stream", limit=1))["next"]
    answer = await app_client.get(f"{ONE}/ledger", params={"cursor": cursor})
    assert (answer.status_code, answer.json()["code"]) == (422, "bad_cursor")


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_an_unknown_line_item_has_no_list(app_client: httpx.AsyncClient) -> None:
    """Each list says so, as a page and as a table."""
    for path in list(LISTS)[:-1]:
        for query in ("", "?format=csv"):
            answer = await app_client.get(path.replace("/a/", "/b/") + query)
            assert (answer.status_code, answer.json()["code"]) == (404, "no_such_line_item"), path


async def test_a_chart_tells_steps_of_five_minutes(
    app_client: httpx.AsyncClient, migrated_url: str
) -> None:
    """Counts and prices of a day by itself, of a span when one is named."""
    await wins(app_client, 0)
    log(migrated_url, BID, PASS, BID)
    span = {"from": DAY.format(0), "until": "2026-12-01T00:10:00Z"}
    told = await read(app_client, f"{ONE}/chart", **span)
    assert (told["step_s"], len(told["steps"])) == (300, 2)
    first, second = told["steps"]
    assert (first["at"], first["counts"], first["passes"]) == (
        *(DAY.format(0), {"bid": 2}, {"frozen": 1}),
    )
    assert first["bid"]["median_cpm"] == pytest.approx(1.234567, rel=0.095)
    assert (second["counts"], second["bid"], second["cost"]) == ({}, None, "0.00")
    assert len((await read(app_client, f"{ONE}/chart"))["steps"]) in (288, 289)


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_chart_of_no_span_is_refused(app_client: httpx.AsyncClient) -> None:
    """Backwards, no time, a word we do not read, or more days than one look reads."""
    await wins(app_client, 0)
    backwards = "until=2026-12-01T00:00:00Z&from=2026-12-02T00:00:00Z"
    long = "from=2026-09-01T00:00:00Z&until=2026-12-01T00:00:00Z"
    for query in ("from=x", "step=5", backwards, long):
        answer = await app_client.get(f"{ONE}/chart?{query}")
        assert (answer.status_code, answer.json()["code"]) == (422, "bad_field"), query
    assert (await app_client.get("/v1/line-items/b/chart")).status_code == 404
