"""The bench of single prices in its shortest form."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main
from service.commands.bench_decide import TIMED, steps


def test_every_method_and_step_is_timed(capsys: pytest.CaptureFixture[str]) -> None:
    """All methods that learn, and the steps around a price."""
    assert main(["bench", "decide", "--quick", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert set(found) == {*TIMED, *steps()}
    assert all(min(took) > 0 for took in found.values())


def test_a_profile_names_where_time_goes(capsys: pytest.CaptureFixture[str]) -> None:
    """The function that prices stands in it."""
    assert main(["bench", "decide", "--quick", "--profile", "linear"]) == 0
    assert "propose" in capsys.readouterr().out
