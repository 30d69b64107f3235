"""Figures of benches: what is reached, what a program reads, what a person reads."""

from __future__ import annotations

import json

import pytest

from service.commands import figures
from service.commands.figures import Figure


@pytest.mark.parametrize(
    ("figure", "aim", "at_least", "reached"),
    [
        (1.0, None, False, None),
        (1.2, 1.2, False, True),
        (1.21, 1.2, False, False),
        (0.9, 0.9, True, True),
        (0.89, 0.9, True, False),
    ],
)
def test_an_aim_is_a_floor_or_a_ceiling(
    figure: float, aim: float | None, at_least: bool, reached: bool | None
) -> None:
    """The aim itself is reached on both sides; without one nothing is said."""
    assert Figure("x", figure, "ms", None, aim, at_least).reached is reached


def test_rounds_are_told_by_their_median_and_their_ends() -> None:
    """One round has no spread, for it says nothing of the noise."""
    found = figures.of_rounds("x", "ms", [3.0, 1.0, 2.0], 2.0)
    assert (found.figure, found.spread, found.reached) == (2.0, (1.0, 3.0), True)
    assert figures.of_rounds("x", "ms", [3.0]).spread is None


def test_one_missed_aim_is_enough_to_miss_them() -> None:
    """What has no aim misses none."""
    sound = [Figure("a", 9.0, "ms"), Figure("b", 1.0, "ms", aim=2.0)]
    assert figures.all_reached(sound)
    assert not figures.all_reached([*sound, Figure("c", 3.0, "ms", aim=2.0)])


def test_a_program_reads_six_members(capsys: pytest.CaptureFixture[str]) -> None:
    """Of every figure the same, in one list."""
    figures.write([figures.of_rounds("x", "ms", [1.0, 2.0], 5.0), Figure("y", 3, "")])
    assert json.loads(capsys.readouterr().out) == [
        {"name": "x", "figure": 1.5, "unit": "ms", "spread": [1, 2], "aim": 5, "reached": True},
        {"name": "y", "figure": 3, "unit": "", "spread": None, "aim": None, "reached": None},
    ]


def test_a_person_reads_each_figure_with_its_unit(capsys: pytest.CaptureFixture[str]) -> None:
    """Beside it the ends, the aim in words, yes or no, and the notes at the end."""
    found = [
        figures.of_rounds("start", "s", [1.0, 2.0, 1000.4], 5.0),
        Figure("rate", 0.5, "times", aim=0.9, at_least=True),
    ]
    figures.show("Growth", found, "A note.")
    lines = [" ".join(line.split()) for line in capsys.readouterr().out.splitlines()]
    assert "start 2.00 s 1.00 to 1,000 at most 5 yes" in lines
    assert "rate 0.50 times at least 0.9 no" in lines
    assert "A note." in lines
