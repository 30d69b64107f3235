"""The folding bench as a command: every learner, its speed, its growth, its exit code."""

from __future__ import annotations

import json
from argparse import Namespace

import pytest

from service.commands import bench_learn
from service.commands.bench_learn import Reading, growth
from service.rehearsal.lesson_stream import BATCH, LEARNERS

QUICK = Namespace(seed=7, quick=True, json=True, profile=False, only=list(LEARNERS))


def test_every_learner_is_timed_at_every_size(capsys: pytest.CaptureFixture[str]) -> None:
    """Positive times, a growth with its aim, and small states."""
    bench_learn.run(QUICK)
    found = {one["name"]: one for one in json.loads(capsys.readouterr().out)}

    assert [name.removesuffix(", state") for name in found if name.endswith(", state")] == list(
        LEARNERS
    )
    for name in LEARNERS:
        assert found[f"{name}, growth from 10 to 10,000 lessons"]["aim"] == bench_learn.GROWTH_MAX
        for size in bench_learn.QUICK_SIZES:
            assert found[f"{name}, a lesson after {size:,}"]["figure"] > 0.0
        assert found[f"{name}, a snapshot made ready"]["figure"] > 0.0
        assert found[f"{name}, state"]["figure"] < 65_536


@pytest.mark.parametrize("learner", ["kl-ucbid", "exptree", "linear"])
def test_what_is_timed_is_what_the_learner_knew(learner: str) -> None:
    """Just so many lessons as the size says, and a whole batch to come, in any run the same."""
    stages = bench_learn.learnt(LEARNERS[learner], (10, 700), 7, lambda done: None)
    again = bench_learn.learnt(LEARNERS[learner], (10, 700), 7, lambda done: None)
    assert [stage.lessons for stage in stages] == [10, 700]
    assert [len(stage.batch) >= BATCH for stage in stages] == [True, True]
    assert stages == again
    read = bench_learn.read(LEARNERS[learner], stages)
    assert [len(one.folds_s) for one in read] == [bench_learn.TIMED] * 2


def test_the_table_names_lessons_a_second(capsys: pytest.CaptureFixture[str]) -> None:
    """Each learner's cost at each size, its growth, what a price takes and the size of a state."""
    readings = [
        Reading(10, (2e-6, 2e-6, 3e-6), 1e-3, 900),
        Reading(10_000, (4e-6, 3e-6, 9e-6), 2e-3, 1000),
    ]
    bench_learn._show({"kl-ucbid": readings}, (10, 10_000))
    written = " ".join(capsys.readouterr().out.split())

    heads = "lessons/s us at 10 us at 10,000 growth from, to price (us) state (bytes)"
    assert heads in written
    assert "kl-ucbid 250,000 2.0 4.0 2.00 1.50 to 3.00 2000 1,000" in written
    assert growth(readings) == 2.0
