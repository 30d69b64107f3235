"""The bench of the edge in its shortest form: real servers, figures whole, nothing timed."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main
from service.commands.bench_http import BATCH, HALF, LINEAR, OUTCOMES, SINGLE


def test_both_sides_answer_all_of_the_same_load(capsys: pytest.CaptureFixture[str]) -> None:
    """Every kind of traffic has a ratio in every round, and no answer was wrong."""
    assert main(["bench", "http", "--json", "--rounds", "1", "--requests", "200"]) == 0
    contests = {one["name"]: one for one in json.loads(capsys.readouterr().out)}
    assert list(contests) == [SINGLE, LINEAR, BATCH, HALF, OUTCOMES]
    for contest in contests.values():
        assert len(contest["ratios"]) == 1
        assert contest["ratio"] > 0
        assert [side["wrong"] for side in contest["bare"] + contest["ours"]] == [0, 0]
    assert contests[BATCH]["rows"] == 100
