"""A database that is stopped delays no bid: its time beside the same load with it up."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main

SHORT = ["--seconds", "5", "--rate", "50", "--json"]


def test_bids_go_on_while_the_database_is_stopped(capsys: pytest.CaptureFixture[str]) -> None:
    """Every one is answered, nearly all with a price, and no slower than before."""
    assert main(["drill", "outage", *SHORT]) == 0
    up, stopped, again = json.loads(capsys.readouterr().out)
    assert [one["failed"] for one in (up, stopped, again)] == [0, 0, 0]
    assert stopped["bids"] == 250
    assert stopped["priced"] >= 240
    assert again["priced"] >= 240
    # Twice is far above what is measured, and far below waiting for a database.
    assert stopped["p50_ms"] < max(10, 2 * up["p50_ms"])
