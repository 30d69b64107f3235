"""The bench of two workers: figures worked out by hand, and its shortest form on real crews."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main
from service.commands.bench_workers import GAIN, Round, compared, said

NAMES = [
    "rate of two workers over one",
    "the same by their processor time, with a processor each",
]


def played(rate: float, workers_us: float) -> Round:
    """One round of one crew."""
    return Round(rate, workers_us, load_us=30.0, busier_share=0.6, wrong=0)


@pytest.mark.parametrize(("processors", "judged"), [(4, 0), (16, 0), (2, 1), (3, 1)])
def test_what_is_judged_depends_on_the_processors(processors: int, judged: int) -> None:
    """The rate where each process has one of its own, else the time each worker spends."""
    one = [played(100.0, 100.0), played(110.0, 100.0), played(90.0, 100.0)]
    two = [played(180.0, 125.0), played(187.0, 100.0), played(171.0, 160.0)]
    found = {each.name: each for each in compared(one, two, processors)}
    rate, worth = (found[name] for name in NAMES)
    assert rate.figure == pytest.approx(1.8)
    assert worth.figure == pytest.approx(1.6)
    assert worth.spread == (1.25, 2.0)
    assert [each.aim for each in (rate, worth)] == [
        GAIN if place == judged else None for place in range(2)
    ]


def test_too_few_processors_are_said() -> None:
    """With how many there are and how many it takes."""
    assert said(2).startswith("Only 2 processors here")
    assert "which need 4" in said(2)
    assert said(8).startswith("8 processors: each worker")


@pytest.mark.long
@pytest.mark.parametrize("traffic", ["single", "mixed"])
def test_both_crews_answer_the_same_load(traffic: str, capsys: pytest.CaptureFixture[str]) -> None:
    """No answer is wrong, and both crews have a rate and a price in processor time."""
    words = ["--rounds", "1", "--requests", "100", "--traffic", traffic, "--json"]
    assert main(["bench", "workers", *words]) in (0, 1)
    found = {one["name"]: one for one in json.loads(capsys.readouterr().out)}
    assert list(found)[:2] == NAMES
    assert min(found[f"{crew}, rate"]["figure"] for crew in ("one worker", "two workers")) > 0.0
    assert 0.0 < found["busier of the two workers"]["figure"] <= 1.0
