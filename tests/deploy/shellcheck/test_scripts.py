"""Every shell script of the checkout, read by shellcheck."""

from __future__ import annotations

import shutil
import subprocess

from tests.house import ROOT, tracked


def scripts() -> list[str]:
    """Every tracked file whose first line names a shell."""
    found = []
    for path in tracked():
        with (ROOT / path).open("rb") as file:
            first = file.readline()
        if first.startswith(b"#!") and first.rstrip().endswith((b"sh", b"bash")):
            found.append(path)
    return found


def checked(*words: str, text: str | None = None) -> subprocess.CompletedProcess[str]:
    """What shellcheck says of files, or of a text."""
    tool = shutil.which("shellcheck")
    assert tool, "shellcheck is not installed; Debian's package of that name carries it"
    return subprocess.run([tool, *words], cwd=ROOT, capture_output=True, text=True, input=text)


def test_shellcheck_finds_nothing() -> None:
    """No script has one of the mistakes that shells forgive until the wrong moment."""
    named = scripts()
    assert {"deploy/test", "deploy/try", "deploy/backup", "deploy/restore", ".ci/run"} <= set(named)
    done = checked(*named)
    assert done.returncode == 0, done.stdout


def test_shellcheck_would_find_something() -> None:
    """A script with such a mistake is refused, so the test above can fail."""
    assert checked("-", text="#!/bin/sh\nrm -rf $1/*\n").returncode != 0
