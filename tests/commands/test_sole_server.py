"""One crew for one SQLite file, and none while a child of a killed one still lives."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from service.commands import serve
from service.errors import Unsafe
from service.settings import load

WAITS = "import sys; sys.stdin.read()"


def test_a_file_is_served_until_the_last_child_has_gone(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A child holds the lock of its crew, so that nobody restores a file that it writes to."""
    monkeypatch.setattr(serve, "LEAVE_S", 0.2)
    settings = load({"BIDKEEL_DATABASE_URL": f"sqlite:///{tmp_path / 'garden.db'}"})
    with serve.sole_server(settings) as lock:
        assert lock is not None
        child = subprocess.Popen(
            [sys.executable, "-c", WAITS], pass_fds=[lock], stdin=subprocess.PIPE
        )
    with pytest.raises(Unsafe, match="Another process serves"), serve.sole_server(settings):
        pass
    child.communicate()
    with serve.sole_server(settings) as again:
        assert again is not None


def test_on_postgresql_there_is_nothing_to_hold() -> None:
    """Any number of crews may serve one database."""
    settings = load({"BIDKEEL_DATABASE_URL": "postgresql://somebody@127.0.0.1/garden"})
    with serve.sole_server(settings) as one, serve.sole_server(settings) as two:
        assert (one, two) == (None, None)
