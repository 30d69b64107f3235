"""`bidkeel drill catalogue`: every fault we know, what is right, and the test that shows it.

The rows lie beside the tests, since they name them; so this needs a checkout, not an install.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
import tomllib
from collections import Counter
from dataclasses import asdict, dataclass
from pathlib import Path
from xml.etree import ElementTree

from rich.console import Console
from rich.table import Table

import service
from service.errors import BidkeelError

ROOT = Path(service.__file__).parent.parent
ROWS = Path("tests") / "catalogue"
FAMILIES = (
    *("input", "order", "crash", "database", "clock"),
    *("overload", "security", "operator", "numbers", "learner"),
)
PASSED, FAILED, MISSING, NOT_RUN, NO_MATTER = "passed", "FAILED", "MISSING", "not run", "-"


class NoCatalogue(BidkeelError):
    """The rows or the tests are not here."""


@dataclass(frozen=True, slots=True)
class Row:
    """
    One fault.

    Attributes:
        tests: Node ids, without parameters; none when `why` says why it cannot happen.
    """

    family: str
    id: str
    fault: str
    right: str
    tests: tuple[str, ...] = ()
    why: str = ""
    result: str = NOT_RUN


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--list", action="store_true", help="print the rows and run no test")
    parser.add_argument("--family", choices=FAMILIES, action="append", help="only these rows")
    parser.add_argument("--json", action="store_true", help="print rows for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Run every test that a row names and print the table.

    Returns:
        0 when each row has its passed tests or its reason, else 3.
    """
    rows = read(arguments.family or FAMILIES)
    results = {} if arguments.list else results_of(sorted({t for row in rows for t in row.tests}))
    judged = [judge(row, results, ran=not arguments.list) for row in rows]
    if arguments.json:
        sys.stdout.write(json.dumps([asdict(row) for row in judged]) + "\n")
    else:
        _show(judged)
    return 3 if any(row.result in (FAILED, MISSING) for row in judged) else 0


def read(families: tuple[str, ...] | list[str] = FAMILIES, root: Path = ROOT) -> list[Row]:
    """
    Read the rows.

    Raises:
        NoCatalogue: There is none here, as in an installed package.
    """
    rows: list[Row] = []
    for family in families:
        path = root / ROWS / f"{family}.toml"
        if not path.exists():
            raise NoCatalogue(f"No {ROWS} here: run this in a checkout.")
        told = tomllib.loads(path.read_text("utf-8"))
        for one in told["row"]:
            named = (one["id"], one["fault"], one["right"])
            rows.append(Row(told["title"], *named, tuple(one.get("tests", ())), one.get("why", "")))
    return rows


def judge(row: Row, results: dict[str, str], *, ran: bool) -> Row:
    """A row with what became of its tests."""
    named = (row.family, row.id, row.fault, row.right, row.tests, row.why)
    if not row.tests:
        return Row(*named, NO_MATTER if row.why else MISSING)
    if not ran:
        return Row(*named, NOT_RUN)
    found = [results.get(test, MISSING) for test in row.tests]
    worst = next((word for word in (MISSING, FAILED) if word in found), PASSED)
    return Row(*named, worst)


def results_of(tests: list[str], root: Path = ROOT) -> dict[str, str]:
    """Run these tests, all parameters of each, and say which passed."""
    with tempfile.TemporaryDirectory(prefix="bidkeel-catalogue-") as folder:
        told = Path(folder) / "results.xml"
        line = [sys.executable, "-m", "pytest", "-q", f"--junitxml={told}"]
        line += ["-p", "no:cacheprovider", *existing(tests, root)]
        # Its progress goes to the error output, so that the table stays alone on the other.
        subprocess.run(line, cwd=root, stdout=sys.stderr.fileno(), check=False)  # noqa: S603
        if not told.exists():
            raise NoCatalogue("pytest did not run; install the test extra.")
        return _read_results(told.read_text("utf-8"))


def existing(tests: list[str], root: Path = ROOT) -> list[str]:
    """Those whose file has such a function; pytest runs nothing at all if one is unknown."""
    found = []
    for test in tests:
        path, _, name = test.partition("::")
        file = root / path
        if file.exists() and f"def {name}(" in file.read_text("utf-8"):
            found.append(test)
    return found


def _read_results(text: str) -> dict[str, str]:
    results: dict[str, str] = {}
    # Written by the pytest that was just run, not by anybody else.
    for case in ElementTree.fromstring(text).iter("testcase"):  # noqa: S314
        path = case.attrib["classname"].replace(".", "/") + ".py"
        test = f"{path}::{case.attrib['name'].partition('[')[0]}"
        bad = any(case.find(kind) is not None for kind in ("failure", "error", "skipped"))
        if bad or results.get(test) == FAILED:
            results[test] = FAILED
        else:
            results[test] = PASSED
    return results


def _show(rows: list[Row]) -> None:
    console = Console(width=None if sys.stdout.isatty() else 200)
    for family in dict.fromkeys(row.family for row in rows):
        grid = Table(title=family, title_justify="left", show_lines=False)
        for head in ("row", "fault", "what is right", "test, or why it does not apply", "result"):
            grid.add_column(head, overflow="fold")
        for row in rows:
            if row.family == family:
                tests = "\n".join(test.removeprefix("tests/") for test in row.tests)
                grid.add_row(row.id, row.fault, row.right, tests or row.why, row.result)
        console.print(grid, markup=False)
    counts = Counter(row.result for row in rows)
    told = ", ".join(f"{count} {result}" for result, count in counts.most_common())
    console.print(f"{len(rows)} rows: {told}", highlight=False)
