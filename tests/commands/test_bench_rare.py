"""The tables of rare and late values as commands: what they print and how they end."""

from __future__ import annotations

import json
from argparse import Namespace

import pytest

from service.commands import bench_delay, bench_rare
from service.rehearsal import late, rare
from service.rehearsal.rare import CASES, ENTRANTS, ORACLE, Row
from service.rehearsal.rare_guesses import Told


def arguments(**said: object) -> Namespace:
    """Options of either command, at a size of seconds."""
    usual = {"seed": 0, "runs": 3, "quick": True, "processes": 2, "json": False}
    return Namespace(**{**usual, "opportunities": 2000, "per_day": None, **said})


def test_the_table_shows_every_case_entrant_and_refusal(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Five cases and wrong guesses, what asks for a word, what is refused, and the conditions."""
    monkeypatch.setenv("COLUMNS", "160")
    bench_rare.run(arguments())
    written = capsys.readouterr().out

    assert all(case in written for case in CASES)
    assert all(written.count(f" {name} ") >= len(CASES) for name in ENTRANTS)
    assert written.count("refused  ") == 2 * (len(CASES) - 1)
    assert "typical threefold" in written
    assert "asks" in written
    assert "counts at its mean value" in " ".join(written.split())


def test_figures_of_rare_values_for_a_program(capsys: pytest.CaptureFixture[str]) -> None:
    """The same figures as JSON; so few opportunities are shown and not judged."""
    code = bench_rare.run(arguments(json=True, runs=2))
    found = json.loads(capsys.readouterr().out)

    assert found["opportunities"] == 2000
    assert code == 0
    assert found["broken"] == []
    assert set(found["cases"]) == set(CASES)
    small = found["cases"][rare.SMALL.name]
    assert set(small) == {ORACLE, *ENTRANTS} - {"exptree", "exptree-win-only"}
    assert small["kl-ucbid"]["asks"] is True
    assert small["kl-ucbid"]["surplus"] < 0 < small[ORACLE]["surplus"]
    assert found["told"]["guess a tenth"]["warned"] is True


def test_what_must_hold_of_rare_values_is_said_when_it_does_not() -> None:
    """A quantile too far from the oracle, and a starving guess nobody was warned of."""
    row = Row("posterior-quantile", 1.0, 0.1, 9.9, 0.1)
    tables = {name: [row] for name in CASES}
    too_far = bench_rare._too_far(tables)
    fine = Told("typical right", 99.0, 100.0, 0.1, warned=False)
    starving = Told("guess a tenth", 0.1, 10.0, 0.1, warned=False)

    assert len(too_far) == 2
    assert "9.90 EUR behind" in too_far[0]
    assert len(bench_rare._badly_told([fine, starving])) == 1
    assert len(bench_rare._badly_told([Told("x", 1.0, 100.0, 0.1, warned=False), starving])) == 2


def test_the_table_of_late_values_shows_every_way(capsys: pytest.CaptureFixture[str]) -> None:
    """Six ways of counting with their share of the oracle, and the conditions."""
    earned = {way: [10**9 * (10 - place), 10**9 * 12] for place, way in enumerate(late.WAYS)}
    bench_delay._show(earned, 700_000, for_a_program=False)
    written = " ".join(capsys.readouterr().out.split())

    assert all(way in written for way in late.WAYS)
    assert "700,000 opportunities in 14 days" in written
    assert "11.00 ± 1.00 100.0 %" in written
    assert "10.50 ± 1.50 95.5 %" in written
    assert "the price of learning" in written


def test_figures_of_late_values_decide_the_exit_code(capsys: pytest.CaptureFixture[str]) -> None:
    """Without --quick, less than 85 % of the oracle is exit code 1."""
    code = bench_delay.run(arguments(per_day=300, runs=1, quick=False, json=True))
    found = json.loads(capsys.readouterr().out)

    least = min(found["ways"][way]["share"] for way in bench_delay.CORRECTED)
    assert found["opportunities"] == 14 * 300
    assert found["ways"][late.ORACLE]["share"] == 1.0
    assert code == (0 if least >= 0.85 else 1)
