"""Every background duty of the clerk has a place of its own among the metrics."""

from __future__ import annotations

from contextlib import closing
from inspect import getcoroutinelocals
from pathlib import Path

from service.app import clerk_of
from service.metrics.series import DUTIES, OTHER
from service.settings import load
from service.store.database import Database
from service.threads import Threads


def test_each_duty_of_the_clerk_is_named(tmp_path: Path) -> None:
    """One that is not in the list would hide behind the others that are not."""
    threads = Threads(1)
    with closing(Database(f"sqlite:///{tmp_path / 'bidkeel.db'}")) as database:
        duties = clerk_of(load({}), database, threads).duties()
        names = [getcoroutinelocals(one)["duty"].__name__ for one in duties]
        for one in duties:
            one.close()
    threads.close()
    assert {"teach", "measure"} <= set(names)
    assert sorted(set(names) - set(DUTIES)) == []
    assert OTHER in DUTIES
