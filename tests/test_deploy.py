"""What deploy/test does where it may not install: it leaves tests out and says how to add them."""

from __future__ import annotations

import os
import shutil
import subprocess
from pathlib import Path

import pytest

from tests.house import ROOT

# In place of Python: makes an environment that holds itself, and says what pytest was asked.
PYTHON = """#!/bin/sh
case "$*" in
    *venv*) mkdir -p .venv/test/bin && cp "$0" .venv/test/bin/python ;;
    *pytest*) echo "asked: $*" ;;
esac
"""
TOOLS = ("cat", "cp", "date", "dirname", "mkdir", "sh")
SOMEBODY = "#!/bin/sh\necho 1000\n"
AXE = ".venv/node/axe-core/node_modules/axe-core/axe.min.js"


def program(path: Path, text: str = "#!/bin/sh\n") -> None:
    """A program that can be run."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text)
    path.chmod(0o755)


@pytest.fixture
def checkout(tmp_path: Path) -> Path:
    """The script in a folder of its own, and a path with the few tools that it needs."""
    shutil.copytree(ROOT / "deploy", tmp_path / "deploy")
    for name in TOOLS:
        program(tmp_path / "bin" / name, f'#!/bin/sh\nexec {shutil.which(name)} "$@"\n')
    program(tmp_path / "bin" / "python3", PYTHON)
    program(tmp_path / "bin" / "id", SOMEBODY)
    program(tmp_path / "bin" / "apt-get", "#!/bin/sh\necho apt-get was called\n")
    return tmp_path


def run(checkout: Path, *arguments: str) -> list[str]:
    """The lines that the script prints."""
    done = subprocess.run(
        ["/bin/sh", "deploy/test", *arguments],
        cwd=checkout,
        env={"PATH": str(checkout / "bin"), "HOME": os.fspath(checkout)},
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.splitlines()


def test_without_a_browser_its_tests_are_left_out_and_named(checkout: Path) -> None:
    """Nobody but root may install; the rest runs, and the last line has the command."""
    lines = run(checkout)
    asked = [line for line in lines if line.startswith("asked:")]
    assert len(asked) == 3
    assert any("--ignore=tests/browser" in line.split() for line in asked)
    assert "; left out tests/browser" in lines[-1]
    assert "`apt-get install chromium` adds" in lines[-1]
    assert "apt-get was called" not in "".join(lines)


def test_without_the_accessibility_script_only_its_tests_are_left_out(checkout: Path) -> None:
    """The browser's other tests run."""
    program(checkout / "bin" / "chromium")
    lines = run(checkout)
    asked = " ".join(line for line in lines if line.startswith("asked:")).split()
    assert "--ignore=tests/browser" not in asked
    assert "--ignore=tests/browser/test_looks.py" in asked
    assert "axe-core" in lines[-1]


def test_with_everything_there_nothing_is_left_out(checkout: Path) -> None:
    """The last line ends with the exit code."""
    for name in ("chromium", "npm", "promtool", "shellcheck"):
        program(checkout / "bin" / name)
    program(checkout / AXE)
    lines = run(checkout)
    assert lines[-1].endswith("exit code 0")
    assert "--ignore=tests/browser" not in " ".join(lines)


def test_what_is_not_asked_for_is_not_looked_after(checkout: Path) -> None:
    """One test of the ledger needs no browser."""
    lines = run(checkout, "tests/ledger", "-k", "late")
    assert [line for line in lines if line.startswith("asked:")] == [
        "asked: -m pytest tests/ledger -k late"
    ]
    assert lines[-1].endswith("exit code 0")
