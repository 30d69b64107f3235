"""Orders on rates: what is refused changes nothing, and what is posted is journalled and told."""

from __future__ import annotations

import json
from typing import Any

import pytest

from service.errors import Conflict, Malformed
from service.store import rates
from tests.builders import Worker, working

pytestmark = pytest.mark.anyio
on_sqlite = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)

NOW_MS = 1_796_000_000_000
Span = tuple[int | None, int | None]


async def post(
    worker: Worker,
    rate: int = 9,
    span: Span = (None, None),
    key: str | None = None,
    into: str = "EUR",
) -> dict[str, Any]:
    """What a dollar costs."""
    worker.database.wall_ms = lambda: NOW_MS
    return await worker.operator.rating.post("USD", into, rate, span, "a try", "tester", key)


def traces(worker: Worker) -> list[int]:
    """How much there is of rates, journal, news and kept answers."""
    tables = ("currency_rate", "journal", "change_log", "repeat_guard")
    return [worker.one(f"SELECT count(*) FROM {table}") for table in tables]  # noqa: S608


@on_sqlite
@pytest.mark.parametrize(
    ("span", "into", "field"),
    [
        ((None, None), "USD", "into"),
        ((None, NOW_MS), "EUR", "until_at"),
        ((None, NOW_MS - 1), "EUR", "until_at"),
        ((5, 5), "EUR", "until_at"),
        ((6, 5), "EUR", "until_at"),
    ],
)
async def test_what_can_be_no_rate_changes_nothing(
    migrated_url: str, span: Span, into: str, field: str
) -> None:
    """Both currencies one, or an end that is not after its beginning, by default now."""
    async with working(migrated_url) as worker:
        before = traces(worker)
        with pytest.raises(Malformed) as refused:
            await post(worker, span=span, into=into, key="once")
        assert (refused.value.code, refused.value.data) == ("bad_field", {"field": field})
        assert traces(worker) == before


@on_sqlite
async def test_a_rate_counts_from_now_unless_it_says_so(migrated_url: str) -> None:
    """The answer names beginning, end, number and who set it."""
    async with working(migrated_url) as worker:
        first = await post(worker)
        assert first == {
            **{"number": 1, "currency": "USD", "into": "EUR", "rate": 9, "from_ms": NOW_MS},
            **{"until_ms": None, "set_ms": NOW_MS, "actor": "tester", "reason": "a try"},
        }
        second = await post(worker, span=(7, 8))
        assert (second["number"], second["from_ms"], second["until_ms"]) == (2, 7, 8)


async def test_the_journal_tells_what_counted_before(migrated_url: str) -> None:
    """Of this pair only; every worker hears of it by one change."""
    async with working(migrated_url) as worker:
        await post(worker, 9)
        await post(worker, 5, into="CHF")
        await post(worker, 11)
        details = worker.column("SELECT detail FROM journal ORDER BY number")
        before = [[row["rate"] for row in json.loads(one)["before"]] for one in details]
        assert before == [[], [], [9]]
        assert [json.loads(one)["after"]["rate"] for one in details] == [9, 5, 11]
        kinds = worker.column("SELECT kind FROM change_log ORDER BY number")
        assert kinds == [rates.KIND] * 3


async def test_a_repeat_posts_nothing_again(migrated_url: str) -> None:
    """The same key and wish is one rate; another wish under that key is refused."""
    async with working(migrated_url) as worker:
        first = await post(worker, 9, key="once")
        before = traces(worker)
        assert await post(worker, 9, key="once") == first
        with pytest.raises(Conflict) as refused:
            await post(worker, 10, key="once")
        assert refused.value.code == "idempotency_key_reused"
        with pytest.raises(Conflict):
            await post(worker, 9, (7, None), key="once")
        assert traces(worker) == before
        assert [row["rate"] for row in await worker.operator.rating.list()] == [9]


@on_sqlite
async def test_the_list_is_empty_before_the_first(migrated_url: str) -> None:
    """Then it holds what counts and what is to come."""
    async with working(migrated_url) as worker:
        assert await worker.operator.rating.list() == []
        await post(worker, 9)
        await post(worker, 10, (NOW_MS + 1, None))
        await post(worker, 8)
        assert [row["rate"] for row in await worker.operator.rating.list()] == [8, 10]
