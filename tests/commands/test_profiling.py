"""A bench says where its time goes when it is asked to, beside what it prints for programs."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main


@pytest.mark.parametrize(
    ("words", "function"),
    [
        (["bench", "store", "--rows", "100"], "sqlite3.Connection"),
        (["bench", "learn", "--quick", "--only", "mean"], "fold.py"),
    ],
)
def test_a_profile_stands_apart_from_the_figures(
    words: list[str], function: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """Functions on standard error, whole JSON on standard output."""
    # What it took is judged too, and on a busy machine an aim may be missed.
    assert main([*words, "--json", "--profile"]) in (0, 1)
    said = capsys.readouterr()
    assert function in said.err
    assert json.loads(said.out)
