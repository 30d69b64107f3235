"""The bench of growth in its shortest form: a real server that grows a little."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main

SMALL = ["--line-items", "20", "--decisions", "2000", "--bids", "100", "--probes", "3"]


def test_every_figure_is_found(capsys: pytest.CaptureFixture[str]) -> None:
    """Whether an aim is reached depends on the machine; that it is measured does not."""
    assert main(["bench", "growth", "--json", "--rate", "200", *SMALL]) in (0, 1)
    found = json.loads(capsys.readouterr().out)
    assert len(found) == 6
    assert all(one["figure"] > 0 for one in found if "memory" not in one["name"])
    assert any("20 line items" in one["name"] for one in found)
