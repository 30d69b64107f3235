"""The folding bench as a command: every learner, its speed, its growth, its exit code."""

from __future__ import annotations

import json
from argparse import Namespace

import pytest

from service.commands import bench_learn
from service.commands.bench_learn import Reading, growth
from service.rehearsal.lesson_stream import LEARNERS

QUICK = Namespace(seed=7, quick=True, json=True)


def test_every_learner_is_timed_at_every_size(capsys: pytest.CaptureFixture[str]) -> None:
    """JSON with positive times and small states, more lessons from size to size."""
    bench_learn.run(QUICK)
    learners = json.loads(capsys.readouterr().out)["learners"]

    assert list(learners) == list(LEARNERS)
    for figures in learners.values():
        assert figures["lessons"] == sorted(figures["lessons"])
        pairs = zip(figures["lessons"], bench_learn.QUICK_SIZES, strict=True)
        assert all(folded >= size for folded, size in pairs)
        assert min(figures["fold_s"]) > 0.0
        assert min(figures["price_s"]) > 0.0
        assert max(figures["state_bytes"]) < 65_536


def test_the_table_names_lessons_a_second(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Each learner's cost at each size, its growth, what a price takes and the size of a state."""
    monkeypatch.setenv("COLUMNS", "160")
    readings = [Reading(1000, 2e-6, 1e-3, 900), Reading(10_000, 4e-6, 2e-3, 1000)]
    bench_learn._show({"kl-ucbid": readings}, (1000, 10_000), for_a_program=False)
    written = " ".join(capsys.readouterr().out.split())

    assert "lessons/s us at 1,000 us at 10,000 growth price (us) state (bytes)" in written
    assert "kl-ucbid 250,000 2.0 4.0 2.00 2000 1,000" in written
    assert growth(readings) == 2.0
