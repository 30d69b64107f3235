"""The reading bench: an invented week that the audit finds sound, and a small run over HTTP."""

from __future__ import annotations

import os
import subprocess
import sys
from argparse import Namespace

import pytest
from sqlalchemy import text

from service.commands import bench_reads, memory_of, orchard
from service.commands.bench_reads import Exported, Figures, Timing
from service.commands.orchard import DAY_MS, DAYS, LINE_ITEM
from service.commands.server_process import ServerProcess
from service.store import charting
from service.store.audit import audit
from service.store.database import Database

BEGIN_MS = 1_796_083_200_000
ROWS = 2000


@pytest.fixture(name="figures", scope="module")
def _figures(tmp_path_factory: pytest.TempPathFactory) -> Figures:
    """One small run, as the command makes it, but for its words."""
    arguments = Namespace(rows=ROWS, seed=7, folder=None, postgresql=False, json=True)
    server = ServerProcess(tmp_path_factory.mktemp("reads"))
    return bench_reads._measured(server, arguments)


def test_every_page_holds_rows(figures: Figures) -> None:
    """What is asked for is there, whole pages of it; what is nowhere is an empty page."""
    rows = {name: timing.rows for name, timing in figures.pages.items()}
    assert rows.pop("decisions, what is nowhere") == 0
    assert rows.pop("journal") == 0  # Nobody ordered anything.
    assert rows.pop("stream, a rare kind") == 1
    assert (rows.pop("chart of a day"), rows.pop("chart of a week")) in ((289, 169), (288, 169))
    assert all(1 < count <= 50 for count in rows.values()), rows
    assert all(0 < one.median_ms <= one.worst_ms for one in figures.pages.values())


def test_every_row_comes_out(figures: Figures) -> None:
    """Those of the line item asked for, in bytes that are known."""
    assert figures.export.rows >= figures.orchard_rows > 0.8 * ROWS
    assert figures.export.bytes > 50 * figures.export.rows
    assert figures.export.seconds > 0


def test_memory_is_told_where_the_kernel_tells(figures: Figures) -> None:
    """Of all processes of the server; an interpreter alone holds more than ten MiB."""
    told = figures.memory_mib_idle, figures.memory_mib_pages, figures.memory_mib_export
    known = memory_of.peak_bytes(os.getpid()) is not None
    assert [size is not None and size > 10 for size in told] == [known] * 3


def test_the_figures_are_shown_with_their_units(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Each in ms, rows a second or MiB; what nobody knows is called unknown."""
    monkeypatch.setenv("COLUMNS", "160")
    pages = {"journal": Timing(30.0, 1.25, 9.0, 50)}
    export = Exported(1000, 2**20, 2.0, 12.0, 1.0, 7.5)
    bench_reads._show(
        Figures("SQLite", 4000, 1000, 8.0, pages, 0.5, 2.5, export, 100.0, 101.0, None)
    )
    written = " ".join(capsys.readouterr().out.split())
    assert "Time to first byte, 4,000 decisions on SQLite" in written
    assert "journal 50 30.0 1.2 9.0" in written
    assert "Filled in 8 s (500 decisions a second)." in written
    assert "2.0 s, 500 rows a second, 1 MiB, first byte after 12.0 ms" in written
    assert "99 % 2.5 ms; beside the export: 1.0 ms and 7.5 ms" in written
    assert "100 MiB at rest, 101 MiB after the pages, unknown during the export" in written


def test_an_invented_week_is_sound(migrated_url: str) -> None:
    """The audit agrees with its money, and the chart with its decisions."""
    database = Database(migrated_url)
    orchard.plant(database, BEGIN_MS)
    told = list[int]()
    mine = orchard.fill(database, 700, 7, BEGIN_MS, told.append)
    assert sum(told) == 700
    assert database.read(audit) == []
    chart = database.read(
        lambda c: charting.chart(c, LINE_ITEM, BEGIN_MS, BEGIN_MS + DAYS * DAY_MS)
    )
    bids = sum(bucket.counts.get("bid", 0) for bucket in chart.buckets)
    assert bids + sum(sum(bucket.passes.values()) for bucket in chart.buckets) == mine
    spent = database.read(lambda c: c.execute(text("SELECT sum(spent) FROM balance")).scalar_one())
    assert sum(bucket.cost for bucket in chart.buckets) == spent > 0
    database.close()


def test_the_peak_of_a_process_counts_its_children() -> None:
    """A child that holds fifty MiB is counted with its parent; afterwards the peak is forgotten."""
    grow = "import sys; held = bytearray(50 << 20); sys.stdout.write('x'); sys.stdout.flush(); "
    with subprocess.Popen(
        [sys.executable, "-c", grow + "sys.stdin.read()"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
    ) as child:
        assert child.stdout is not None
        child.stdout.read(1)
        assert child.pid in memory_of.family(os.getpid())
        peak = memory_of.peak_bytes(child.pid)
        assert peak is None or peak > 50 << 20
        memory_of.forget_peak(child.pid)
        child.communicate(b"")
    assert memory_of.peak_bytes(child.pid) is None
