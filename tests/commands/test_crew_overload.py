"""A crew whose database hangs or is gone: bids go on, outcomes are told to come again."""

from __future__ import annotations

import json
import socket
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import httpx
import numpy
import pytest

from service.commands.server_process import HOST
from service.store.audit import audit
from tests.builders import outage
from tests.commands.crews import Serving, crew
from tests.databases import PostgreSQL

pytestmark = pytest.mark.parametrize("backend", ["postgresql"], indirect=True)


def bidding(
    serving: Serving, seconds: float, pause_s: float = 0.01
) -> tuple[list[float], list[object]]:
    """Bid at an even pace; how long each answer took in seconds, and each price."""
    took_s, prices = list[float](), list[object]()
    with serving.caller() as client:
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            began = time.monotonic()
            prices.append(serving.bid(client)["bid_cpm"])
            took_s.append(time.monotonic() - began)
            time.sleep(pause_s)
    return took_s, prices


def told(name: str, took_s: list[float]) -> str:
    """Median and 99th percentile, for whoever reads the test's output."""
    half, nearly_all = numpy.quantile(took_s, [0.5, 0.99]) * 1000
    return f"{name}: p50 {half:.1f} ms, p99 {nearly_all:.1f} ms of {len(took_s)} bids"


def test_bids_do_not_feel_a_database_that_hangs(
    migrated_url: str, tmp_path: Path, postgresql: PostgreSQL
) -> None:
    """From slices in hand each leaves as fast as before; whatever waited is in order after."""
    with crew(migrated_url, tmp_path, 2, lease_s="60") as serving:
        serving.create()
        serving.everybody(2)
        # Slices double as they are used up, so the hand is full before the database hangs; then
        # the pace is slower, or it would be the money that ran out and not the time.
        before, _ = bidding(serving, 4)
        with postgresql.hanging():
            during, prices = bidding(serving, 2, pause_s=0.04)
        print(told("up", before), told("hanging", during), sep="; ")  # noqa: T201
        assert set(prices) <= {2, None}
        # On a busy machine a bid may pass for its deadline's sake; hardly any may.
        assert prices.count(None) * 20 <= len(prices)
        assert max(during) < 0.5
        assert float(numpy.median(during)) < 5 * float(numpy.median(before)) + 0.01
        serving.database.close()
        assert bidding(serving, 0.5)[1][-1] == 2
        assert serving.server.stop() == 0
        assert serving.database.read(audit) == []


def test_outcomes_are_told_to_come_again_and_then_are_recorded(
    migrated_url: str, tmp_path: Path
) -> None:
    """503 with Retry-After while the database is gone; the same call later is booked once."""
    with crew(migrated_url, tmp_path, 1) as serving, serving.caller() as client:
        serving.create()
        # The news of the key that this caller has must have been read, or the worker would
        # have to look the key up again while the database is gone.
        time.sleep(1.0)
        row = {"ticket": serving.bid(client)["ticket"], "kind": "lost"}
        with outage(migrated_url):
            answer = client.post("/v1/outcomes", json={"outcomes": [row]})
            assert (answer.status_code, answer.headers["retry-after"]) == (503, "1")
            assert serving.bid(client)["bid_cpm"] == 2
        serving.database.close()
        answers = [client.post("/v1/outcomes", json={"outcomes": [row]}) for _ in range(2)]
        statuses = [answer.json()["results"][0]["status"] for answer in answers]
        assert statuses == ["recorded", "duplicate"]


def test_a_flood_of_outcomes_is_turned_away_unread(migrated_url: str, tmp_path: Path) -> None:
    """Beyond the calls allowed the answer is 503 at once, while bids are answered with 200."""
    with crew(migrated_url, tmp_path, 1, outcome_calls_max="1") as serving:
        serving.create()
        with serving.caller() as client:
            row = {"ticket": serving.bid(client)["ticket"], "kind": "lost"}
        host, port = HOST, serving.server.port
        body = json.dumps({"outcomes": [row]}).encode()
        head = f"POST /v1/outcomes HTTP/1.1\r\nHost: {host}\r\nContent-Type: application/json\r\n"
        head += f"Authorization: Bearer {serving.server.key}\r\nContent-Length: {len(body)}\r\n\r\n"
        with ThreadPoolExecutor(1) as pool, serving.caller() as client:
            slow = pool.submit(send_slowly, host, port, head.encode(), body)
            time.sleep(0.5)
            refused = client.post("/v1/outcomes", json={"outcomes": [row]})
            assert (refused.status_code, refused.json()["code"]) == (503, "overloaded")
            assert refused.headers["retry-after"] == "1"
            assert {post_bid(client).status_code for _ in range(20)} == {200}
            assert b"200 OK" in slow.result()
            again = client.post("/v1/outcomes", json={"outcomes": [row]})
            assert again.json()["results"][0]["status"] == "duplicate"


def post_bid(client: httpx.Client) -> httpx.Response:
    """One bid, as it is answered."""
    return client.post("/v1/bids", json={"line_item": "garden"})


def send_slowly(host: str, port: int, head: bytes, body: bytes) -> bytes:
    """A caller whose body comes a second and a half after its head; the answer."""
    with socket.create_connection((host, port)) as connection:
        connection.sendall(head)
        time.sleep(1.5)
        connection.sendall(body)
        return connection.recv(65536)


def test_a_stop_takes_less_than_ten_seconds_though_the_database_hangs(
    migrated_url: str, tmp_path: Path, postgresql: PostgreSQL
) -> None:
    """What could not be given back stays held, which is the safe side, and every promise holds."""
    with crew(migrated_url, tmp_path, 2) as serving:
        serving.create()
        serving.everybody(2)
        children = serving.children("worker") + serving.children("clerk")
        with postgresql.hanging():
            began = time.monotonic()
            assert serving.server.stop() == 0
            took_s = time.monotonic() - began
        print(f"stopped beside a hanging database in {took_s:.1f} s")  # noqa: T201
        assert took_s < 10
        assert [child.pid for child in children if child.is_running()] == []
        serving.database.close()
        assert serving.one("SELECT held FROM balance") > 0
        assert serving.database.read(audit) == []
