"""The table of regret as a command: what it prints, for people and for programs."""

from __future__ import annotations

import json
from argparse import Namespace

import pytest

from service.commands import bench_regret
from service.rehearsal import contest, regret_table, worlds
from service.rehearsal.regret_table import Size


@pytest.fixture(name="arguments")
def _arguments(monkeypatch: pytest.MonkeyPatch) -> Namespace:
    """The command at a size of a second."""
    monkeypatch.setattr(bench_regret, "QUICK", Size((60, 120), 3, 2))
    return Namespace(seed=7, quick=True, processes=1, json=False)


def test_the_table_names_every_market_method_and_condition(
    arguments: Namespace, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """One table a market with its winner marked, then benchmark, feedback and what broke."""
    monkeypatch.setenv("COLUMNS", "200")
    code = bench_regret.run(arguments)
    written = capsys.readouterr().out

    assert all(stage.says in written for stage in worlds.STAGES.values())
    assert all(written.count(method) >= len(worlds.STAGES) for method in regret_table.METHODS)
    assert written.count(" *") >= len(worlds.STAGES)
    assert "no bound" in written
    assert "Benchmark: the best fixed bid" in written
    assert "Feedback:" in written
    # So few rounds are too few for a tree to beat a grid, and the command says so.
    assert code == 1
    assert "not 2.5 times better than the grid" in written


def test_figures_for_a_program_are_whole(
    arguments: Namespace, capsys: pytest.CaptureFixture[str]
) -> None:
    """JSON with every mean, error, exponent and bound, and the same sentences of what broke."""
    arguments.json = True
    bench_regret.run(arguments)
    found = json.loads(capsys.readouterr().out)

    assert found["horizons"] == [60, 120]
    assert list(found["markets"]) == list(worlds.STAGES)
    for market in found["markets"].values():
        assert list(market["methods"]) == list(regret_table.METHODS)
        assert market["winner"] in market["methods"]
    ucbid = found["markets"][worlds.IID]["methods"][contest.UCBID]
    assert len(ucbid["regret"]) == len(ucbid["error"]) == 2
    assert ucbid["bounds"][1] > ucbid["bounds"][0] > ucbid["regret"][0] > 0
    assert any("grid" in sentence for sentence in found["broken"])
