"""Servers restarted one by one under load: no bid fails, no outcome is lost, no slice kept."""

from __future__ import annotations

import json
from contextlib import closing

import pytest
from sqlalchemy import text

from service.__main__ import main
from service.commands.drill_rolling import kept_slices
from service.metrics.series import OTHER, PASSES
from service.store import leases, line_items
from service.store.database import Database, Writing
from service.store.workers import beat
from tests.builders import NAME, line_item


def test_a_rolling_restart_is_noticed_by_nobody(capsys: pytest.CaptureFixture[str]) -> None:
    """Every bid is answered, most with a price; the rest are passes with documented reasons."""
    assert main(["drill", "rolling", "--rounds", "1", "--rate", "30", "--json"]) == 0
    (figures,) = [json.loads(line) for line in capsys.readouterr().out.splitlines()]
    assert (figures["servers"], figures["restarts"]) == (3, 3)
    assert figures["bids"] > 100
    assert (figures["failed_bids"], figures["lost"], figures["kept_slices"]) == (0, 0, 0)
    assert figures["outcomes"] > 50
    assert set(figures["passes"]) <= set(PASSES) - {OTHER}
    assert figures["held_end"] == "0.00"
    assert figures["stop_s_max"] < 10


def test_a_slice_of_somebody_who_left_is_found(migrated_url: str) -> None:
    """One that lives may hold slices; one that is off the list may not."""
    with closing(Database(migrated_url)) as database:

        def work(connection: Writing) -> None:
            line_items.create(connection, line_item(), 1)
            beat(connection, "here", 0, 1)

        database.write(work)
        wish = leases.LeaseRequest(NAME, bytes([1]) * 16, 1, 0)
        leases.lease(database, "here", [wish], 30)
        assert kept_slices(database) == 0
        gone = text("DELETE FROM worker")
        database.write(lambda connection: connection.execute(gone))
        assert kept_slices(database) == 1
