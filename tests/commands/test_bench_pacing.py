"""`bidkeel bench pacing` prints its tables, and the same figures for a program."""

from __future__ import annotations

import json
import subprocess

import pytest

from service.commands import bench_pacing
from service.commands.server_process import command

Found = dict[str, dict[str, dict[str, float]]]


@pytest.fixture(name="found", scope="module")
def _found() -> Found:
    words = command("bench", "pacing", "--quick", "--json", "--seed", "3")
    done = subprocess.run(words, capture_output=True, check=True, text=True)
    found: Found = json.loads(done.stdout)
    return found


def test_the_figures_for_a_program_hold_what_is_promised(found: Found) -> None:
    """A quick run: shares of the programme, of the oracle and of the hours, and times by hints."""
    assert set(found) == {"budget", "return_target", "hours", "hints"}
    assert all(row["of the programme"] >= 0.97 for row in found["budget"].values())
    assert all(0.99 <= row["budget spent"] <= 1.0 for row in found["budget"].values())
    strict = [row for name, row in found["return_target"].items() if name.startswith("strict")]
    assert [row["lowest slack, of its spend"] for row in strict] == [0.0, 0.0]
    within = [row["hours within 10 %"] for row in found["hours"].values()]
    assert len(within) == 4
    assert min(within) >= 0.95
    assert any(row["times"] >= 2.0 for row in found["hints"].values())


def test_every_row_is_printed_in_its_table(
    found: Found, capsys: pytest.CaptureFixture[str]
) -> None:
    """One table for each kind of figure, with its unit."""
    bench_pacing.show(found, for_a_program=False)
    written = capsys.readouterr().out

    assert all(title[:12] in written for title in bench_pacing.TITLES.values())
    assert all(row[:20] in written for rows in found.values() for row in rows)
    assert "%" in written
