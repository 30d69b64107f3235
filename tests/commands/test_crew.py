"""Real workers on one port: they share the work, die, come again, and leave in order."""

from __future__ import annotations

import contextlib
import signal
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import httpx
import psutil
import pytest

from service.app import new_worker
from service.commands.crew import RESTART_S_MAX, SOUND_S, Berth, delay_s, listen
from service.commands.server_process import is_ready
from service.errors import Unsafe
from service.settings import load
from service.store.audit import audit
from tests.commands.crews import NAME, PRICE, Serving, crew, until

on_postgresql = pytest.mark.parametrize("backend", ["postgresql"], indirect=True)


def hammer(serving: Serving, callers: int) -> list[dict[str, object]]:
    """Bid from so many connections at once until nobody serves any more; all that was answered."""

    def call(_: int) -> list[dict[str, object]]:
        answers = list[dict[str, object]]()
        with serving.caller() as client, contextlib.suppress(httpx.TransportError):
            while True:
                answers.append(serving.bid(client))
        return answers

    with ThreadPoolExecutor(callers) as pool:
        return [answer for answers in pool.map(call, range(callers)) for answer in answers]


@on_postgresql
def test_workers_share_the_port_and_leave_in_order(migrated_url: str, tmp_path: Path) -> None:
    """Each bids from its own slice; a stop under load takes seconds and leaves only open bids."""
    with crew(migrated_url, tmp_path, 3) as serving:
        serving.create()
        serving.everybody(3)
        assert (len(serving.children("worker")), len(serving.children("clerk"))) == (3, 1)
        alone = serving.asked
        with ThreadPoolExecutor(1) as pool:
            load = pool.submit(hammer, serving, 4)
            time.sleep(1.0)
            began = time.monotonic()
            assert serving.server.stop() == 0
            took_s = time.monotonic() - began
            answers = load.result()
        assert took_s < 10
        assert len(answers) > 100
        assert {answer["bid_cpm"] for answer in answers} == {2}
        # Whatever was taken out of a slice was answered, up to the last request in flight.
        bids = serving.one("SELECT count(*) FROM decision WHERE price IS NOT NULL")
        assert bids == len(answers) + alone
        assert serving.one("SELECT held FROM balance") == bids * PRICE
        assert serving.column("SELECT id FROM worker") == []
        assert serving.database.read(audit) == []
        assert not is_ready(serving.server.port)


@on_postgresql
def test_a_killed_worker_is_replaced_while_others_serve(migrated_url: str, tmp_path: Path) -> None:
    """Every new connection is answered, the dead one is off the list, the new one is another."""
    with crew(migrated_url, tmp_path, 2) as serving:
        serving.create()
        serving.everybody(2)
        before = set(serving.column("SELECT id FROM worker"))
        (first, _), old = serving.children("worker"), serving.children("clerk")
        first.send_signal(signal.SIGKILL)
        until(lambda: bool(serving.bid()) and len(serving.children("worker")) == 2)
        until(lambda: len(set(serving.column("SELECT id FROM worker")) - before) == 1)
        after = set(serving.column("SELECT id FROM worker"))
        assert len(after) == 2
        assert len(after & before) == 1
        assert serving.children("clerk") == old


def test_a_killed_clerk_is_replaced_and_teaches_on(migrated_url: str, tmp_path: Path) -> None:
    """Bids never needed it; lessons go on with the next one."""
    with crew(migrated_url, tmp_path, 1) as serving:
        serving.create(policy={"method": "mean"})
        (clerk,) = serving.children("clerk")
        clerk.send_signal(signal.SIGKILL)
        with serving.caller() as client:
            answer = serving.bid(client)
            rows = [{"ticket": answer["ticket"], "kind": "won", "clearing_cpm": answer["bid_cpm"]}]
            assert client.post("/v1/outcomes", json={"outcomes": rows}).status_code == 200
        until(lambda: serving.one("SELECT seq FROM learner") >= 3)
        assert serving.children("clerk") != [clerk]


@on_postgresql
def test_nobody_outlives_a_killed_crew(migrated_url: str, tmp_path: Path) -> None:
    """Its workers give back what they hold and free the port, as if they had been told."""
    with crew(migrated_url, tmp_path, 2) as serving:
        serving.create()
        serving.everybody(2)
        children = serving.children("worker") + serving.children("clerk")
        if (alone := serving.server.child) is not None:
            alone.kill()
            alone.wait()
        psutil.wait_procs(children, timeout=10)
        assert [child.pid for child in children if child.is_running()] == []
        bids = serving.one("SELECT count(*) FROM decision WHERE price IS NOT NULL")
        assert serving.one("SELECT held FROM balance") == bids * PRICE
        serving.server.start()
        assert serving.bid()["line_item"] == NAME


def test_more_than_one_worker_is_refused_on_sqlite() -> None:
    """The sentence says what to do instead."""
    with pytest.raises(Unsafe, match="SQLite serves one worker; set BIDKEEL_WORKERS to 1 or name"):
        load({"BIDKEEL_WORKERS": "2"})


def test_a_child_that_dies_young_is_waited_for_longer_each_time() -> None:
    """From a tenth of a second to five; one that lived for long is replaced at once."""
    berth = Berth("worker", 0, started_at=100.0)
    waits = []
    for _ in range(8):
        berth.died(101.0)
        waits.append(round(berth.not_before - 101.0, 1))
    assert waits == [0.1, 0.2, 0.4, 0.8, 1.6, 3.2, 5.0, 5.0]
    berth.died(100.0 + SOUND_S + 1)
    assert berth.not_before == 100.0 + SOUND_S + 1 + delay_s(0)
    assert delay_s(10**6) == RESTART_S_MAX


def test_no_two_workers_share_an_id() -> None:
    """Nor do those of two hosts that happen to have the same process number."""
    ids = {new_worker().partition("-")[2] for _ in range(1000)}
    assert (len(ids), {len(one) for one in ids}) == (1000, {16})


def test_a_socket_is_made_for_either_kind_of_address() -> None:
    """Version 4 and, where the machine has it, version 6."""
    with listen("127.0.0.1", 0) as shared:
        assert shared.getsockname()[1] > 0
