"""Pruning apart from the clerk: only what is old enough, and no more pieces than were asked for."""

from __future__ import annotations

import json
import subprocess
import sys
from contextlib import closing
from typing import Any

import pytest

from service.commands import pruner, server_process
from service.store import decisions
from service.store.database import Database

DAY_MS = 86_400_000
OLD, NEW = 5200, 30  # More than one piece of old ones.


def log(database: Database, old: int, new: int) -> None:
    """So many decisions of two months ago, and behind them so many of now."""
    row: dict[str, Any] = {"line_item": "garden", "ref": None, "request_id": "op", "source": "a"}
    row |= {"floor": 0, "price": None, "reason": "no_value", "set_by": None, "snapshot": 0}
    now_ms = database.wall_ms()
    moments = [now_ms - 60 * DAY_MS] * old + [now_ms] * new
    decisions.log(database, [{**row, "test": 0, "at_ms": at_ms} for at_ms in moments])


@pytest.mark.parametrize(("wished", "gone"), [(1, decisions.PRUNED_MAX), (10**6, OLD)])
def test_old_rows_go_piece_by_piece(migrated_url: str, wished: int, gone: int) -> None:
    """Until so many are gone as were wished, or until none is old enough."""
    with closing(Database(migrated_url)) as database:
        log(database, OLD, NEW)
        assert pruner.pruned(database, 30, wished) == gone
        assert pruner.pruned(database, 30, 10**6) == OLD - gone


def test_it_waits_for_its_signal_and_says_what_it_did(migrated_url: str) -> None:
    """In a process of its own, under the settings of a server."""
    with closing(Database(migrated_url)) as database:
        log(database, 20, NEW)
    with subprocess.Popen(
        [sys.executable, "-m", "service.commands.pruner", "1000"],
        env={**server_process.inherited(), "BIDKEEL_DATABASE_URL": migrated_url},
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdout is not None
        assert process.stdout.readline() == "ready\n"
        said = json.loads(process.communicate("\n")[0])
    assert said["rows"] == 20
    assert said["seconds"] >= 0.0
