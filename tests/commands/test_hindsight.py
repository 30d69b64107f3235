"""`bidkeel hindsight` and `bidkeel bench hindsight`: a table for people, JSON for programs."""

from __future__ import annotations

import asyncio
import json

import pytest

from service.__main__ import main
from service.commands import bench_hindsight
from service.feedback import Report
from service.rehearsal.hindsight_coverage import Held
from tests.builders import NAME, PRICE, working

SQLITE_ONLY = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)


@pytest.fixture
def played(migrated_url: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """A log of a win and a loss, in the database that the settings name."""

    async def play() -> None:
        async with working(migrated_url) as worker:
            await worker.create()
            one, two = await worker.bids(2)
            await worker.report(
                Report("won", one.ticket, clearing=PRICE // 2),
                Report("value", one.ticket, value=PRICE, event_id="e"),
                Report("lost", two.ticket),
            )
            await worker.upkeep.log()

    asyncio.run(play())
    monkeypatch.setenv("BIDKEEL_DATABASE_URL", migrated_url)


@SQLITE_ONLY
@pytest.mark.usefixtures("played")
def test_a_table_keeps_the_lines_apart(capsys: pytest.CaptureFixture[str]) -> None:
    """As it was, without a model, each assumption, and the refusals with their code."""
    assert main(["hindsight", NAME, "--cap", "0.75"]) == 0
    shown = capsys.readouterr().out
    for words in ("as it was", "without a model", "values_alike", "0.0005", "100.0 %"):
        assert words in shown
    assert "refused: only_for_a_flat_price" in shown


@SQLITE_ONLY
@pytest.mark.usefixtures("played")
def test_programs_read_what_the_route_answers(capsys: pytest.CaptureFixture[str]) -> None:
    """The same names, amounts as text."""
    assert main(["hindsight", NAME, "--flat", "1.5", "--json"]) == 0
    read = json.loads(capsys.readouterr().out)
    assert read["alternative"] == {"kind": "flat", "price_cpm": 1.5}
    assert read["without_model"]["surplus"]["low"] == "-0.001"


@SQLITE_ONLY
@pytest.mark.usefixtures("played")
def test_what_makes_no_sense_ends_with_one(capsys: pytest.CaptureFixture[str]) -> None:
    """A sentence on the error output, and no trace."""
    assert main(["hindsight", NAME, "--flat", "9"]) == 1
    assert main(["hindsight", "meadow", "--floor", "1"]) == 1
    said = capsys.readouterr().err
    assert said.count("bidkeel: ") == 2
    assert "Traceback" not in said


def test_the_bench_counts_every_interval(capsys: pytest.CaptureFixture[str]) -> None:
    """Three logs: every interval without a model holds, so the command ends well."""
    assert main(["bench", "hindsight", "--logs", "3", "--processes", "1", "--json"]) == 0
    read = json.loads(capsys.readouterr().out)
    assert read["broken"] == []
    assert read["intervals"]["without a model, flat"] == {"held": 12, "looked": 12}


def test_one_interval_that_misses_breaks_the_bench() -> None:
    """Without a model never; a labelled one as far as chance goes; a rough guide may."""
    total = {
        "without a model, flat": Held(999, 1000),
        "values alike, 95 %": Held(923, 1000),
        "ips of a control arm, 95 %": Held(915, 1000),
        "rivals alike, rough guide": Held(1, 1000),
    }
    assert bench_hindsight.broken(total) == ["without a model, flat"]
    total["values alike, 95 %"].held = 921
    assert "values alike, 95 %" in bench_hindsight.broken(total)
