"""The bench of growth in its shortest form: real servers that grow a little."""

from __future__ import annotations

import json
from typing import Any

import pytest

from service.__main__ import main
from service.commands import growth_log
from service.commands.bench_growth import SECTIONS
from service.commands.growth_log import Point

SMALL = {
    "line-items": 20,
    "decisions": 2000,
    "lessons": 40,
    "active": 2,
    "rate": 400,
    "bids": 100,
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


def test_log_and_stream_grow_and_old_rows_go(capsys: pytest.CaptureFixture[str]) -> None:
    """Each look at the log, each method's lessons, and all old rows pruned beside the bids."""
    found = told(capsys, "--only", "decisions", "lessons", "busy")
    for count in ("200", "2,000"):
        assert f"0 to {count} decisions in the log, bid p50, after over before" in found
    assert found["a decision on disk"]["unit"] == "bytes"
    for method in ("kl-ucbid", "linear"):
        name = f"{method}, 10 to 40 lessons"
        assert found[f"{name}, teaching an entry after"]["figure"] > 0.0
        assert found[f"{name}, outcome until its price moves, after"]["figure"] > 0.0
    assert found["busy, old decisions pruned"]["figure"] == 100 * SMALL["bids"]
    assert found["busy, outcomes"]["figure"] > 0.0
    assert found["busy over quiet, bid p99"]["aim"] == 2.0


@pytest.mark.long
@pytest.mark.parametrize("section", SECTIONS)
def test_each_section_stands_alone_on_postgresql(
    section: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """With servers and databases of its own."""
    assert told(capsys, "--only", section, "--database", "postgresql")


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
