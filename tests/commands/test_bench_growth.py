"""The bench of growth in its shortest form: real servers that grow a little."""

from __future__ import annotations

import json
from collections.abc import Mapping
from contextlib import closing
from decimal import Decimal
from functools import partial
from typing import Any

import pytest

from service.__main__ import main
from service.api.forms.configs import read_new
from service.commands import bodies, growth_lessons, growth_log
from service.commands.bench_growth import SECTIONS
from service.commands.growth_log import Point
from service.configuring import filled
from service.store import auditing, charting, learners, line_items
from service.store.audit import Balance
from service.store.database import Database, Writing
from service.teaching import FRESH

SMALL = {
    "line-items": 20,
    "decisions": 2000,
    "lessons": 40,
    "active": 2,
    "rate": 400,
    "bids": 100,
    "rounds": 1,
    "probes": 4,
}


def told(capsys: pytest.CaptureFixture[str], *words: str) -> dict[str, dict[str, Any]]:
    """Figures of a small run by their names; whether an aim is reached depends on the machine."""
    sizes = [word for name, size in SMALL.items() for word in (f"--{name}", str(size))]
    assert main(["bench", "growth", "--json", *sizes, *words]) in (0, 1)
    found = json.loads(capsys.readouterr().out)
    assert all(one["figure"] >= 0.0 for one in found if one["unit"] == "ms")
    return {one["name"]: one for one in found}


def test_many_line_items_are_made_known_and_taught(capsys: pytest.CaptureFixture[str]) -> None:
    """Bids among all and among some, memory, start, a crowd, and freshness of both methods."""
    found = told(capsys, "--only", "items", "crowd", "fresh")
    assert found["20 line items, made one call each"]["aim"] == 60.0
    assert found["1 to 20 line items, 2 of them asked, bid p50, after over before"]["aim"] == 1.2
    assert found["1 to 20 line items, all asked by turns, bid p50 after"]["figure"] > 0.0
    assert found["32 connections over 16 on one line item, rate"]["figure"] > 0.0
    for method, active in (("kl-ucbid", 20), ("linear", 2)):
        name = f"outcome until its price moves, {method}"
        assert found[f"{name}, p99"]["figure"] >= found[f"{name}, p50"]["figure"] > 0.0
        assert 1 <= found[f"{name}: line items told of meanwhile"]["figure"] <= active


def test_the_log_grows_and_old_rows_go(capsys: pytest.CaptureFixture[str]) -> None:
    """Each look at the log, and all old rows pruned beside the bids."""
    found = told(capsys, "--only", "decisions", "busy")
    for count in ("200", "2,000"):
        assert f"0 to {count} decisions in the log, bid p50, after over before" in found
    assert found["a decision on disk"]["unit"] == "bytes"
    assert found["busy, old decisions pruned"]["figure"] == 100 * SMALL["bids"]
    assert found["busy, outcomes"]["figure"] > 0.0
    assert found["busy over quiet, bid p99"]["aim"] == 2.0


@pytest.mark.long
@pytest.mark.parametrize("backend", ["sqlite", "postgresql"])
@pytest.mark.parametrize("section", SECTIONS)
def test_each_section_stands_alone(
    section: str, backend: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """With servers and databases of its own, on both databases."""
    assert told(capsys, "--only", section, "--database", backend)


@pytest.mark.parametrize("method", ["kl-ucbid", "linear"])
def test_a_stream_is_filled_as_workers_and_clerk_fill_it(migrated_url: str, method: str) -> None:
    """Every lesson is booked, taught, counted for charts and audited, and no money is lost."""
    said = list[str]()
    with closing(Database(migrated_url)) as database:
        asked = json.dumps(bodies.line_item("many", method))
        config, _ = read_new(json.loads(asked, parse_float=Decimal), database.wall_ms())
        database.write(partial(_begin, config=filled(config)[0], now=database.wall_ms()))
        pages = growth_lessons.fill(database, "many", 45, said.append)
        balance = database.read(partial(Balance.read, line_item="many"))
        assert not database.read(learners.behind)
        assert charting.roll(database) == 0
        (piece,), frozen = auditing.audit_on(database, ["many"])
        assert (piece.whole, piece.found, frozen) == (True, [], [])
    assert said[-1] == "many: 45 of 45 lessons"
    # 43 wins and the values of two of them; each was paid for.
    assert balance.spent == 43 * growth_lessons.PAID
    assert sum(page.entries for page in pages) == balance.seq
    assert len(pages) >= 10


def _begin(connection: Writing, config: Mapping[str, Any], now: int) -> None:
    line_items.create(connection, config, now)
    learners.begin(connection, config["id"], FRESH, now)


@pytest.mark.parametrize(
    ("most", "steps"),
    [
        (1, [1, 1]),
        (2000, [200, 2000]),
        (100_000, [10_000, 100_000]),
        (10_000_000, [100_000, 1_000_000, 10_000_000]),
        (3_000_000, [100_000, 1_000_000, 3_000_000]),
    ],
)
def test_the_log_is_looked_at_by_powers_of_ten(most: int, steps: list[int]) -> None:
    """And at two places at least, or nothing could be projected."""
    assert growth_log.steps(most) == steps


def test_a_projection_follows_the_last_rise() -> None:
    """A decade's rise once more by decades, ten times as much in proportion; bytes by the row."""
    first, last = Point(10**6, 1.0, 10**8), Point(10**7, 1.05, 10**9)
    found = [one.figure for one in growth_log.projected(first, last)]
    assert found[0] == pytest.approx(1.10)
    assert found[1] == pytest.approx(1.05 + 0.05 * 10)
    assert found[2] == pytest.approx(100.0)
    assert found[3] == pytest.approx(10**10 / 2**30)


def test_a_log_that_seems_to_make_bids_quicker_is_noise() -> None:
    """Nothing is projected from a fall."""
    first, last = Point(10**6, 1.3, 10**8), Point(10**7, 1.1, 10**9)
    assert [one.figure for one in growth_log.projected(first, last)][:2] == [1.1, 1.1]
