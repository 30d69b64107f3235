"""`bidkeel bench reads`: how quickly a large log is read, page by page, as a table, as a chart."""

from __future__ import annotations

import argparse
import json
import statistics
import tempfile
import threading
import time
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import asdict, dataclass
from http.client import HTTPConnection, HTTPResponse
from pathlib import Path
from urllib.parse import urlencode

from rich.console import Console

from service.api.times import now_ms, time_text
from service.commands import memory_of, options, orchard, report
from service.commands.orchard import DAY_MS, DAYS, LINE_ITEM
from service.commands.postgresql_process import PostgreSQLProcess
from service.commands.server_process import HOST, ServerProcess
from service.errors import BidkeelError
from service.store.database import Database

MS, MIB = 1000.0, 1024.0**2
TIMED = 15  # Calls of each kind; the first is told apart, since it finds nothing in memory.
QUIET_S_MAX = 900.0
PIECE = 1 << 16
BEAT_S = 0.05
ONE = f"/v1/line-items/{LINE_ITEM}"


class NotRead(BidkeelError):
    """The server refused what the bench wants to read, or read it wrongly."""


@dataclass(frozen=True, slots=True)
class Timing:
    """Milliseconds to the first byte of a body: of the first call, then middle and worst."""

    first_ms: float
    median_ms: float
    worst_ms: float
    rows: int


@dataclass(frozen=True, slots=True)
class Exported:
    """One export: its rows, its time, and what bids beside it waited."""

    rows: int
    bytes: int
    seconds: float
    first_byte_ms: float
    bid_median_ms: float
    bid_p99_ms: float


@dataclass(frozen=True, slots=True)
class Figures:
    """All that was measured; memory of the whole server in MiB, None where nobody tells."""

    database: str
    rows: int
    orchard_rows: int
    fill_s: float
    pages: dict[str, Timing]
    bid_median_ms: float
    bid_p99_ms: float
    export: Exported
    memory_mib_idle: float | None
    memory_mib_pages: float | None
    memory_mib_export: float | None


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--rows", type=options.count, default=1_000_000, help="decisions to log")
    parser.add_argument("--seed", type=options.seed, default=7, help="chooses the decisions")
    parser.add_argument("--folder", type=Path, default=None, help="where a large file has room")
    parser.add_argument(
        "--postgresql", action="store_true", help="on a PostgreSQL of its own, not on SQLite"
    )
    parser.add_argument("--json", action="store_true", help="print figures for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Fill a database, read it through a real server, and delete it.

    Returns:
        0 when every row came out as it went in.
    """
    with ExitStack() as stack:
        made = tempfile.TemporaryDirectory(prefix="bidkeel-reads-", dir=arguments.folder)
        folder, settings = Path(stack.enter_context(made)), dict[str, str]()
        if arguments.postgresql:
            settings["BIDKEEL_DATABASE_URL"] = stack.enter_context(PostgreSQLProcess()).url
        server = ServerProcess(folder, settings)
        figures = _measured(server, arguments)
    if arguments.json:
        Console().print_json(data=asdict(figures))
    else:
        _show(figures)
    return 0


def _measured(server: ServerProcess, arguments: argparse.Namespace) -> Figures:
    # The first start makes the schema and the key; the fill then has the database to itself.
    server.start()
    server.stop()
    url, begin_ms = server.environment["BIDKEEL_DATABASE_URL"], now_ms() - DAYS * DAY_MS
    started = time.monotonic()
    mine = _fill(url, arguments.rows, arguments.seed, begin_ms)
    fill_s = time.monotonic() - started
    with server:
        pid = server.child.pid if server.child else 0
        _wait_until_quiet(server)
        memory_of.forget_peak(pid)
        idle = memory_of.peak_bytes(pid)
        pages = {name: _timed(server, path, rows) for name, (path, rows) in reads(begin_ms).items()}
        paged = memory_of.peak_bytes(pid)
        alone = _Bids(server)
        alone.run_for(5.0 if arguments.rows > 100_000 else 0.5)
        memory_of.forget_peak(pid)
        export = _exported(server, mine)
        whole = memory_of.peak_bytes(pid)
    kind = "PostgreSQL" if arguments.postgresql else "SQLite"
    sizes = [None if size is None else size / MIB for size in (idle, paged, whole)]
    waits = alone.quantile(0.5), alone.quantile(0.99)
    return Figures(kind, arguments.rows, mine, fill_s, pages, *waits, export, *sizes)


def reads(begin_ms: int) -> dict[str, tuple[str, str]]:
    """What is timed: by its name the path, and the member of the answer that holds rows."""
    middle, end = begin_ms + DAYS * DAY_MS // 2, begin_ms + DAYS * DAY_MS
    day, week = {"from": time_text(end - DAY_MS)}, {"from": time_text(begin_ms)}
    deep = {"from": time_text(middle - DAY_MS), "until": time_text(middle)}
    wanted: dict[str, tuple[str, dict[str, str], str]] = {
        "decisions, first page": ("decisions", {}, "decisions"),
        "decisions, deep by time": ("decisions", deep, "decisions"),
        "decisions, passes of one reason": (
            *("decisions", {**deep, "reason": "no_value"}, "decisions"),
        ),
        "decisions, what is nowhere": ("decisions", {"set_by": "floor"}, "decisions"),
        "stream, first page": ("stream", {}, "stream"),
        "stream, deep by time": ("stream", deep, "stream"),
        "stream, a rare kind": ("stream", {"kind": "create"}, "stream"),
        "ledger, first page": ("ledger", {}, "entries"),
        "lessons, deep by time": ("lessons", deep, "lessons"),
        "journal": ("journal", {}, "journal"),
        "chart of a day": ("chart", {**day, "until": time_text(end)}, "steps"),
        "chart of a week": ("chart", {**week, "until": time_text(end)}, "steps"),
    }
    return {
        name: (f"{ONE}/{path}?{urlencode(query)}", rows)
        for name, (path, query, rows) in wanted.items()
    }


def _fill(url: str, rows: int, seed: int, begin_ms: int) -> int:
    database = Database(url, statement_timeout_ms=120_000)
    try:
        orchard.plant(database, begin_ms)
        with report.progress() as bar:
            task = bar.add_task("Decisions", total=rows)
            return orchard.fill(
                database, rows, seed, begin_ms, lambda done: bar.advance(task, done)
            )
    finally:
        database.close()


def _wait_until_quiet(server: ServerProcess) -> None:
    """The clerk teaches and audits what was put there; it must not be timed with the reading."""
    until = time.monotonic() + QUIET_S_MAX
    while time.monotonic() < until:
        state = json.loads(_got(server, f"{ONE}/state"))
        chart = json.loads(_got(server, f"{ONE}/chart"))
        if state["learner"]["entries_behind"] + chart["entries_not_counted_yet"] == 0:
            return
        time.sleep(BEAT_S)
    raise NotRead("The server did not come to rest.")


def _timed(server: ServerProcess, path: str, member: str) -> Timing:
    took, rows = list[float](), 0
    for _ in range(TIMED):
        connection, answer, first_ms = _begun(server, path)
        first = answer.read(1)
        took.append(first_ms())
        rows = len(json.loads(first + answer.read())[member])
        connection.close()
    return Timing(took[0], statistics.median(took[1:]), max(took[1:]), rows)


def _exported(server: ServerProcess, expected: int) -> Exported:
    beside = _Bids(server)
    with beside:
        started = time.monotonic()
        connection, answer, first_ms = _begun(server, f"{ONE}/decisions?format=csv")
        read, lines = len(answer.read(1)), 0
        first = first_ms()
        while piece := answer.read(PIECE):
            read, lines = read + len(piece), lines + piece.count(b"\n")
        seconds = time.monotonic() - started
        connection.close()
    # The first line names the columns. Bids made beside it may have been logged before it began.
    if lines - 1 < expected:
        raise NotRead(f"{lines - 1} of {expected} rows came out.")
    waits = beside.quantile(0.5), beside.quantile(0.99)
    return Exported(lines - 1, read, seconds, first, *waits)


class _Bids:
    """A caller who asks for a price every 50 ms, and how long each took."""

    def __init__(self, server: ServerProcess) -> None:
        self._server, self._over = server, threading.Event()
        self._took = list[float]()
        self._thread = threading.Thread(target=self._run, daemon=True)

    def __enter__(self) -> None:
        self._thread.start()

    def __exit__(self, *_: object) -> None:
        self._over.set()
        self._thread.join()

    def run_for(self, seconds: float) -> None:
        """Ask for so long."""
        with self:
            time.sleep(seconds)

    def quantile(self, share: float) -> float:
        """Of the waits so far, in ms."""
        took = sorted(self._took)
        return took[min(len(took) - 1, int(share * len(took)))] if took else 0.0

    def _run(self) -> None:
        connection = HTTPConnection(HOST, self._server.port, timeout=60)
        head = {"Authorization": f"Bearer {self._server.key}", "Content-Type": "application/json"}
        body = json.dumps({"line_item": LINE_ITEM})
        while not self._over.wait(BEAT_S):
            started = time.perf_counter()
            connection.request("POST", "/v1/bids", body, head)
            connection.getresponse().read()
            self._took.append((time.perf_counter() - started) * MS)
        connection.close()


def _begun(
    server: ServerProcess, path: str
) -> tuple[HTTPConnection, HTTPResponse, Callable[[], float]]:
    """A connection, its answer whose body is not read yet, and the ms since it was asked for."""
    connection = HTTPConnection(HOST, server.port, timeout=120)
    connection.connect()
    started = time.perf_counter()
    connection.request("GET", path, headers={"Authorization": f"Bearer {server.key}"})
    answer = connection.getresponse()
    if answer.status != 200:
        raise NotRead(f"{path} was answered {answer.status}.")
    return connection, answer, lambda: (time.perf_counter() - started) * MS


def _got(server: ServerProcess, path: str) -> bytes:
    connection, answer, _ = _begun(server, path)
    body = answer.read()
    connection.close()
    return body


def _show(found: Figures) -> None:
    console = Console()
    heads = ["rows", "first call (ms)", "median (ms)", "worst (ms)"]
    rows = {
        name: [
            f"{one.rows:,}",
            *(f"{ms:.1f}" for ms in (one.first_ms, one.median_ms, one.worst_ms)),
        ]
        for name, one in found.pages.items()
    }
    title = f"Time to first byte, {found.rows:,} decisions on {found.database}"
    console.print(report.table(title, heads, rows))
    export, sizes = found.export, (found.memory_mib_idle, found.memory_mib_pages)
    told = [*(_size(size) for size in sizes), _size(found.memory_mib_export)]
    console.print(
        f"Filled in {found.fill_s:,.0f} s ({found.rows / found.fill_s:,.0f} decisions a second).\n"
        f"CSV of {export.rows:,} decisions: {export.seconds:,.1f} s, "
        f"{export.rows / export.seconds:,.0f} rows a second, {export.bytes / MIB:,.0f} MiB, "
        f"first byte after {export.first_byte_ms:.1f} ms.\n"
        f"Bids alone: median {found.bid_median_ms:.1f} ms, 99 % {found.bid_p99_ms:.1f} ms; "
        f"beside the export: {export.bid_median_ms:.1f} ms and {export.bid_p99_ms:.1f} ms.\n"
        f"Peak memory of the server, all processes: {told[0]} at rest, {told[1]} after the pages, "
        f"{told[2]} during the export.",
        highlight=False,
    )


def _size(mib: float | None) -> str:
    return "unknown" if mib is None else f"{mib:,.0f} MiB"
