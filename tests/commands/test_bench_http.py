"""The bench of the edge in its shortest form: real servers, figures whole, nothing timed."""

from __future__ import annotations

import argparse
import json
from typing import Any

import pytest

from service.__main__ import main
from service.commands import bench_http, duel
from service.commands.contests import KINDS

SMALL = ["bench", "http", "--json", "--rounds", "1"]
MEMBERS = {"name", "figure", "unit", "spread", "aim", "reached"}


def told(capsys: pytest.CaptureFixture[str], *words: str) -> dict[str, Any]:
    """Figures of a small run, by their names; all answers were right."""
    assert main([*SMALL, *words]) == 0
    found = json.loads(capsys.readouterr().out)
    assert all(one.keys() == MEMBERS for one in found)
    return {one["name"]: one for one in found}


def test_both_sides_answer_all_of_the_same_load(capsys: pytest.CaptureFixture[str]) -> None:
    """Every kind of traffic has a ratio, waits and processor times, and the aims are ours."""
    found = told(capsys, "--requests", "200")
    for kind in KINDS.values():
        word = "p99" if kind.even else "rate"
        judged = found[f"{kind.title}, {word} over the bare one's"]
        assert judged["figure"] > 0.0
        assert judged["aim"] == kind.aim
        assert found[f"{kind.title}, p50"]["figure"] <= found[f"{kind.title}, p99"]["figure"]


@pytest.mark.long
@pytest.mark.parametrize("workers", ["1", "2"])
def test_one_kind_alone_on_postgresql(workers: str, capsys: pytest.CaptureFixture[str]) -> None:
    """Nothing else is played, with one process on each side or with two."""
    words = ["--requests", "100", "--only", "mixed", "--database", "postgresql"]
    found = told(capsys, *words, "--workers", workers)
    assert all(name.startswith(KINDS["mixed"].title) for name in found)


def side(rate: float, wait_ms: float) -> duel.Side:
    """One round of one server."""
    return duel.Side(rate, 100.0, 150.0, wait_ms, 2 * wait_ms, marked=3, wrong=0)


def test_a_person_reads_ratios_aims_and_waits(capsys: pytest.CaptureFixture[str]) -> None:
    """Even loads are judged by their p99, full ones by their rate."""
    played = {
        name: duel.Contest(
            KINDS[name].title, KINDS[name].rows, [side(1000.0, 2.0)], [side(500.0, 3.0)]
        )
        for name in ("single", "half", "mixed")
    }
    arguments = argparse.Namespace(database="sqlite", workers=1, rounds=1)
    bench_http._show(played, arguments)
    lines = [" ".join(line.split()) for line in capsys.readouterr().out.splitlines()]
    assert "bids, kl-ucbid, 1 a request 0.50 0.50 to 0.50 at least 0.9 500 3" in lines
    assert "bids at half load, 1 a request 1.50 1.50 to 1.50 at most 1.5 500 3" in lines
    assert "mixed traffic, 3.85 a request 0.50 0.50 to 0.50 1,925 3" in lines
    assert "mixed traffic 100 100 150 2.00 3.00 4.00 6.00" in lines
