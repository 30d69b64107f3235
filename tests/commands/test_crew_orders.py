"""Freezes, sleepers, time and crash loops with several real workers on PostgreSQL."""

from __future__ import annotations

import signal
import time
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx
import psutil
import pytest

from service.guard.ticket import bid_of
from service.store.audit import audit
from tests.builders import outage
from tests.commands.crews import CAP, NAME, PRICE, Serving, crew, until

pytestmark = pytest.mark.parametrize("backend", ["postgresql"], indirect=True)

HOUR_MS = 3_600_000
BIDS_MAX = 2**32


def order(client: httpx.Client, what: str) -> dict[str, Any]:
    """Freeze or thaw the garden."""
    answer = client.post(f"/v1/line-items/{NAME}/{what}", json={"reason": "a look"})
    assert answer.status_code == 200, answer.text
    return dict(answer.json())


def slice_of(serving: Serving, ref: str) -> str:
    """The slice that a bid was taken from, which its id counts on from."""
    bid = int.from_bytes(bid_of(ref))
    ids = [bytes(one) for one in serving.column("SELECT id FROM slice")]
    (found,) = [one for one in ids if 0 <= bid - int.from_bytes(one) < BIDS_MAX]
    return found.hex()


def test_a_freeze_is_in_force_on_three_workers_within_a_second(
    migrated_url: str, tmp_path: Path
) -> None:
    """Ten times; after the answer no worker names a price, and a thaw lets all of them again."""
    with crew(migrated_url, tmp_path, 3) as serving, serving.caller() as client:
        serving.create()
        serving.everybody(3)
        took_s = list[float]()
        for _ in range(10):
            began = time.monotonic()
            answer = order(client, "freeze")
            took_s.append(time.monotonic() - began)
            assert (answer["in_force"], answer["by"]) == (True, None)
            assert {serving.bid()["pass"] for _ in range(9)} == {"frozen"}
            assert order(client, "thaw")["in_force"] is True
        print(f"freezes in force after {sorted(took_s)[5]:.3f} s, at most {max(took_s):.3f} s")  # noqa: T201
        assert max(took_s) < 1.0
        assert serving.bid()["bid_cpm"] == 2


def test_a_worker_that_sleeps_makes_a_freeze_say_by_when(migrated_url: str, tmp_path: Path) -> None:
    """The moment named is the end of its slice; awake after it, it names no price."""
    with crew(migrated_url, tmp_path, 2, lease_s="4") as serving, serving.caller() as client:
        serving.create()
        serving.everybody(2)
        assert serving.bid(client)["bid_cpm"] == 2
        sleeper = asked_by(serving, client)
        sleeper.send_signal(signal.SIGSTOP)
        with serving.caller() as other:
            answer = order(other, "freeze")
        assert answer["in_force"] is False
        by_s = (datetime.fromisoformat(answer["by"]) - datetime.now(UTC)).total_seconds()
        assert by_s <= 4
        time.sleep(max(0.0, by_s))
        sleeper.send_signal(signal.SIGCONT)
        assert serving.bid(client)["bid_cpm"] is None
        until(lambda: serving.bid(client)["pass"] == "frozen")


def asked_by(serving: Serving, client: httpx.Client) -> psutil.Process:
    """The worker at the other end of this caller's kept connection."""
    (stream,) = client._transport._pool.connections  # type: ignore[attr-defined]
    port = stream._connection._network_stream.get_extra_info("client_addr")[1]
    for worker in serving.children("worker"):
        if any(c.raddr and c.raddr.port == port for c in worker.net_connections("tcp")):
            return worker
    raise LookupError("nobody holds this connection")


def test_a_sleeper_bids_from_no_slice_whose_time_is_over(migrated_url: str, tmp_path: Path) -> None:
    """Asleep for longer than its lease, it bids on from a new slice, and the old one comes back."""
    with crew(migrated_url, tmp_path, 1, lease_s="2") as serving, serving.caller() as client:
        serving.create()
        before = serving.bid(client)
        (worker,) = serving.children("worker")
        worker.send_signal(signal.SIGSTOP)
        time.sleep(3)
        worker.send_signal(signal.SIGCONT)
        after = until(lambda: found if (found := serving.bid(client))["ref"] else None)
        assert slice_of(serving, before["ref"]) != slice_of(serving, after["ref"])
        assert serving.database.read(audit) == []
        serving.server.stop()
        bids = serving.one("SELECT count(*) FROM decision WHERE price IS NOT NULL")
        assert serving.one("SELECT held FROM balance") == bids * PRICE


def test_no_outage_and_no_step_of_the_clock_makes_anything_older(
    migrated_url: str, tmp_path: Path
) -> None:
    """Three workers move one clock: at the pace of one, by two seconds at most, never back."""
    with crew(migrated_url, tmp_path, 3) as serving:
        now = "SELECT now_ms FROM service_clock"
        until(lambda: serving.one("SELECT count(*) FROM worker") == 3)
        first, began = serving.one(now), time.monotonic()
        time.sleep(2.5)
        passed_ms = (time.monotonic() - began) * 1000
        assert passed_ms / 2 < serving.one(now) - first <= passed_ms + 1100

        first = serving.one(now)
        with outage(migrated_url):
            time.sleep(4)
        serving.database.close()  # Our own connections are broken too; new ones come as needed.
        began = time.monotonic()
        until(lambda: serving.one(now) > first)
        time.sleep(1)
        assert serving.one(now) - first <= 2000 + 1100 + (time.monotonic() - began) * 1000

        for step_ms in (HOUR_MS, -HOUR_MS):
            # What the workers see is a wall clock that has jumped the other way.
            first, began = serving.one(now), time.monotonic()
            serving.run("UPDATE service_clock SET seen_ms = seen_ms - :step", step=step_ms)
            seen = []
            while time.monotonic() - began < 3:
                seen.append(serving.one(now))
                time.sleep(0.05)
            assert seen == sorted(seen)
            assert 1000 <= seen[-1] - first <= 2000 + 1100 + 3000


def test_a_crash_loop_strands_little(migrated_url: str, tmp_path: Path) -> None:
    """Past a twentieth of the budget each start risks one bid, and the line item still bids."""
    budget = 5 * 10**9
    with crew(migrated_url, tmp_path, 1) as serving:
        serving.create(budget="5.00")
        for _ in range(6):
            assert until(lambda: answered(serving))["bid_cpm"] == 2
            (worker,) = serving.children("worker")
            worker.send_signal(signal.SIGKILL)
            psutil.wait_procs([worker], timeout=5)
        assert until(lambda: answered(serving))["bid_cpm"] == 2
        sizes = serving.column("SELECT amount FROM slice ORDER BY leased_ms, amount DESC")
        assert sizes[0] == 16 * CAP
        assert sizes[-1] == CAP
        assert serving.one("SELECT held FROM balance") <= budget // 20 + 16 * CAP + 7 * CAP
        assert serving.database.read(audit) == []


def answered(serving: Serving) -> dict[str, Any] | None:
    """The answer of whoever serves, or None while nobody does."""
    try:
        return serving.bid()
    except httpx.TransportError:
        return None
