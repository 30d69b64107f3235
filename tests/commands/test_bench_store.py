"""The bench of the store in its shortest form: every step does its rows, nothing is timed."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main

STEPS = {
    "wins, 100 a group": 200,
    "decisions logged, 500 at once": 200,
    "leases, 20 at once": 40,
    # A birth and two leases of each of the twenty line items, and the wins.
    "entries taught": 260,
    "entries counted for charts": 260,
    "entries audited": 203,
}


@pytest.mark.parametrize("backend", ["sqlite", "postgresql"])
def test_every_step_takes_its_rows(backend: str, capsys: pytest.CaptureFixture[str]) -> None:
    """All that is leased, won and logged is taught, counted and audited, at some cost."""
    assert main(["bench", "store", "--json", "--rows", "250", "--database", backend]) == 0
    figures = json.loads(capsys.readouterr().out)
    assert figures["database"] == backend
    assert {step["name"]: step["rows"] for step in figures["steps"]} == STEPS
    assert min(step["wall_s"] for step in figures["steps"]) > 0.0


def test_the_table_has_a_unit_for_every_number(capsys: pytest.CaptureFixture[str]) -> None:
    """Rows, rows a second and processor time of one row, for each step."""
    assert main(["bench", "store", "--rows", "100"]) == 0
    written = " ".join(capsys.readouterr().out.split())
    assert "rows rows a second processor us a row" in written
    assert all(name in written for name in STEPS)
