"""The linter and the type checker, run as tests, so that no second command is needed."""

from __future__ import annotations

import subprocess
import sys

import pytest

from tests.house import ROOT


@pytest.mark.parametrize(
    "arguments",
    [("ruff", "check", "."), ("mypy", "service", "migrations", "tests")],
    ids=["ruff", "mypy"],
)
def test_the_tool_finds_nothing(arguments: tuple[str, ...]) -> None:
    """The tool, set up in pyproject.toml, has no complaint about the checkout."""
    command = [sys.executable, "-m", *arguments]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, f"{done.stdout}\n{done.stderr}"
