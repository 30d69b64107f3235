"""The catalogue of faults is whole: each row has a test that exists, or a reason."""

from __future__ import annotations

import json
import tomllib
from collections import Counter
from pathlib import Path

import pytest

from service.__main__ import main
from service.commands import drill_catalogue
from service.commands.drill_catalogue import Row, existing, judge, read
from tests.house import ROOT

ROWS = {
    **{"I": 18, "D": 15, "C": 14, "B": 15, "T": 7, "L": 8, "S": 11, "O": 10, "N": 10, "F": 7},
}
CANNOT_HAPPEN = {"I10", "C13", "S10", "N4"}


def test_all_rows_are_there() -> None:
    """115 faults in ten families, numbered without a gap."""
    ids = [row.id for row in read()]
    assert ids == [f"{letter}{n}" for letter, count in ROWS.items() for n in range(1, count + 1)]
    assert len(ids) == 115


def test_every_row_has_a_test_or_a_reason() -> None:
    """Never both, never neither; the reasons are few and in words."""
    rows = read()
    assert [row.id for row in rows if bool(row.tests) == bool(row.why)] == []
    assert {row.id for row in rows if row.why} == CANNOT_HAPPEN
    assert [row.id for row in rows if row.why and not row.why.endswith(".")] == []


def test_every_named_test_exists() -> None:
    """A row whose test was renamed or deleted is a row without a test."""
    tests = sorted({test for row in read() for test in row.tests})
    assert sorted(set(tests) - set(existing(tests))) == []


def test_each_family_is_data_that_says_no_more_than_it_may() -> None:
    """A misspelt key would hide a test from this check."""
    for path in (ROOT / "tests" / "catalogue").glob("*.toml"):
        told = tomllib.loads(path.read_text("utf-8"))
        keys = {key for row in told["row"] for key in row}
        assert keys <= {"id", "fault", "right", "tests", "why"}, path


@pytest.mark.parametrize(
    ("tests", "why", "results", "result"),
    [
        (("a", "b"), "", {"a": "passed", "b": "passed"}, "passed"),
        (("a", "b"), "", {"a": "passed", "b": "FAILED"}, "FAILED"),
        (("a", "b"), "", {"a": "FAILED"}, "MISSING"),
        ((), "It cannot.", {}, "-"),
        ((), "", {}, "MISSING"),
    ],
)
def test_a_row_is_as_good_as_its_worst_test(
    tests: tuple[str, ...], why: str, results: dict[str, str], result: str
) -> None:
    """One that failed or is not there is not outweighed by the others."""
    row = Row("Crashes", "C1", "It dies.", "It lives.", tests, why)
    assert judge(row, results, ran=True).result == result


def test_the_command_runs_the_tests_it_names(
    tmp_path: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    """One test passes, one fails, one is not there; and each row says so."""
    (tmp_path / "tests" / "catalogue").mkdir(parents=True)
    (tmp_path / "tests" / "test_few.py").write_text(
        "import pytest\n\n@pytest.mark.parametrize('n', [1, 2])\n"
        "def test_good(n): pass\n\ndef test_bad(): raise ValueError\n"
    )
    row = (
        '[[row]]\nid = "C{0}"\nfault = "f"\nright = "r"\ntests = ["tests/test_few.py::test_{1}"]\n'
    )
    rows = "".join(row.format(n, name) for n, name in enumerate(["good", "bad", "gone"], 1))
    (tmp_path / "tests" / "catalogue" / "crash.toml").write_text(f'title = "Crashes"\n{rows}')
    found = read(["crash"], tmp_path)
    results = drill_catalogue.results_of([t for r in found for t in r.tests], tmp_path)
    assert [judge(r, results, ran=True).result for r in found] == ["passed", "FAILED", "MISSING"]
    assert "1 failed, 2 passed" in capfd.readouterr().err


def test_the_list_is_printed_without_running(capsys: pytest.CaptureFixture[str]) -> None:
    """All 115 rows, for people and for programs."""
    assert main(["drill", "catalogue", "--list", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert Counter(row["result"] for row in told) == {"not run": 111, "-": 4}
    assert main(["drill", "catalogue", "--list"]) == 0
    assert "115 rows" in capsys.readouterr().out
