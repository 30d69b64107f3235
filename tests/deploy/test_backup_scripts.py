"""The backup and restore scripts, run for real on a SQLite file."""

from __future__ import annotations

import os
import subprocess
import sys
from contextlib import closing
from pathlib import Path

import pytest
from sqlalchemy import text

from service.commands.server_process import inherited
from service.store.database import Database
from service.store.line_items import create
from service.store.migrate import migrate
from tests.builders import FLAT, NAME
from tests.house import ROOT


def run(script: str, url: str, *words: str) -> subprocess.CompletedProcess[str]:
    """One script, with the command of this checkout."""
    environment = {
        **inherited(),
        "BIDKEEL": f"{sys.executable} -m service",
        "BIDKEEL_DATABASE_URL": url,
        "PATH": os.environ["PATH"],
    }
    command = ["/bin/sh", str(ROOT / "deploy" / script), *words]
    return subprocess.run(command, env=environment, cwd=ROOT, capture_output=True, text=True)


@pytest.fixture(name="url")
def _url(tmp_path: Path) -> str:
    url = f"sqlite:///{tmp_path / 'bidkeel.db'}"
    migrate(url)
    with closing(Database(url)) as database:
        database.write(lambda connection: create(connection, FLAT, 1))
    return url


def test_a_copy_is_kept_among_the_newest_and_comes_back(url: str, tmp_path: Path) -> None:
    """Older copies go, strangers stay; restored, the line item waits for its confirmation."""
    copies = tmp_path / "copies"
    copies.mkdir()
    old = [copies / f"bidkeel-2020010{day}T000000Z" for day in (1, 2, 3)]
    for path in (*old, copies / "bidkeel-notes"):
        path.write_text("old")
    done = run("backup", url, str(copies), "2")
    assert done.returncode == 0, done.stderr
    names = sorted(path.name for path in copies.iterdir())
    assert names[:2] == ["bidkeel-20200103T000000Z", names[1]]
    assert names[2:] == ["bidkeel-notes"]
    assert (copies / names[1]).stat().st_mode & 0o077 == 0
    with closing(Database(url)) as database:
        database.write(lambda connection: connection.execute(text("DELETE FROM fact")))
    back = run("restore", url, str(copies / names[1]))
    assert back.returncode == 0, back.stderr
    assert "reconcile" in back.stdout
    with closing(Database(url)) as database:
        waits = text("SELECT line_item FROM freezing WHERE source = 'restore'")
        assert database.read(lambda c: c.execute(waits).scalars().all()) == [NAME]


def test_a_failed_copy_leaves_the_old_ones_alone(tmp_path: Path) -> None:
    """Nothing half written stays, and nothing is forgotten for a copy that was not made."""
    copies = tmp_path / "copies"
    copies.mkdir()
    old = copies / "bidkeel-20200101T000000Z"
    old.write_text("old")
    url = f"sqlite:///{tmp_path / 'missing' / 'bidkeel.db'}"
    assert run("backup", url, str(copies), "1").returncode != 0
    assert list(copies.iterdir()) == [old]


@pytest.mark.parametrize(
    ("script", "words"),
    [("backup", ()), ("backup", ("x", "none")), ("backup", ("x", "0")), ("restore", ())],
)
def test_wrong_usage_is_told(script: str, words: tuple[str, ...], tmp_path: Path) -> None:
    """Exit code 2 and a sentence, before anything is written."""
    url = f"sqlite:///{tmp_path / 'bidkeel.db'}"
    done = run(script, url, *[str(tmp_path / word) if word == "x" else word for word in words])
    assert done.returncode == 2
    assert done.stderr
    assert list(tmp_path.iterdir()) == []
