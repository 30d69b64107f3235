"""kill -9 amid the demo's traffic: nothing acknowledged is lost, and the money comes back."""

from __future__ import annotations

import signal
import threading
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import httpx
import pytest
from sqlalchemy import text

from service import money
from service.commands import garden
from service.commands.exchange import Auction
from service.commands.server_process import ServerProcess
from service.store.audit import audit, unfunded
from service.store.database import Database, Reading

CLIENTS = 4
AUCTIONS = 20_000
KILLS = 2
TRAFFIC_S = 3.0
SETTINGS = {"BIDKEEL_LEASE_S": "1"}
Rows = list[dict[str, Any]]


@dataclass
class Books:
    """What the exchange knows: every outcome it sent, and which of them were acknowledged."""

    acknowledged: Rows = field(default_factory=list)
    unknown: Rows = field(default_factory=list)
    charged: dict[str, int] = field(default_factory=dict)
    lock: threading.Lock = field(default_factory=threading.Lock)

    def sell(self, auction: Auction, answer: dict[str, Any]) -> Rows:
        """Run one auction; a win is charged here whether or not the service ever hears of it."""
        if answer["bid_cpm"] is None:
            return []
        if money.price(str(answer["bid_cpm"])) <= auction.rival:
            return [{"ticket": answer["ticket"], "kind": "lost"}]
        with self.lock:
            before = self.charged.get(auction.line_item, 0)
            self.charged[auction.line_item] = before + auction.rival
        won = {"kind": "won", "clearing_cpm": money.cpm_number(auction.rival)}
        value = {"kind": "value", "value": money.nanos_text(auction.value or 0), "event_id": "v"}
        return [{"ticket": answer["ticket"], **row} for row in (won, value)]


class Traffic:
    """Four clients that play the demo's auctions until told to stop, whatever the server does."""

    def __init__(self, server: ServerProcess, books: Books, auctions: list[Auction]) -> None:
        self.server, self.books = server, books
        self.queue = iter(auctions)
        self.taking = threading.Lock()
        self.over = threading.Event()
        self.pool = ThreadPoolExecutor(CLIENTS)
        self.clients = [self.pool.submit(self._play) for _ in range(CLIENTS)]

    def stop(self) -> None:
        """Let every client finish its auction."""
        self.over.set()
        for client in self.clients:
            client.result()
        self.pool.shutdown()

    def _play(self) -> None:
        with _client(self.server) as http:
            for auction in self._auctions():
                body = {"request_id": f"r-{auction.number}", "line_item": auction.line_item}
                try:
                    answer = http.post("/v1/bids", json=body)
                except httpx.HTTPError:
                    time.sleep(0.05)
                    continue
                rows = self.books.sell(auction, answer.json())
                self._report(http, rows)

    def _report(self, http: httpx.Client, rows: Rows) -> None:
        """Acknowledged when a receipt came; unknown when the connection broke."""
        if not rows:
            return
        try:
            statuses = _statuses(http, rows)
        except httpx.HTTPError:
            statuses = []
        with self.books.lock:
            if statuses == ["recorded"] * len(rows):
                self.books.acknowledged += rows
            else:
                self.books.unknown += rows

    def _auctions(self) -> Iterator[Auction]:
        while not self.over.is_set():
            with self.taking:
                auction = next(self.queue, None)
            if auction is None:
                return
            yield auction


def test_a_killed_server_loses_nothing_it_acknowledged(migrated_url: str, tmp_path: Path) -> None:
    """After two kills every receipt still stands, V1 to V8 hold, and no money stays held."""
    settings = SETTINGS | {"BIDKEEL_DATABASE_URL": migrated_url}
    books = Books()
    with ServerProcess(tmp_path, settings) as server:
        auctions = _open(server)
        traffic = Traffic(server, books, auctions)
        for _ in range(KILLS):
            time.sleep(TRAFFIC_S)
            server.stop(signal.SIGKILL)
            server.start()
        time.sleep(TRAFFIC_S / 2)
        traffic.stop()
        with _client(server) as http:
            again = _statuses(http, books.acknowledged)
            resent = _statuses(http, books.unknown)
        held = _held_after_grace(migrated_url)
    with closing(Database(migrated_url)) as database:
        spent = database.read(_spent)
        found, loose = database.read(audit), database.read(unfunded)

    assert len(books.acknowledged) > 200
    assert set(again) == {"duplicate"}
    assert set(resent) <= {"recorded", "duplicate"}
    assert found == []
    assert loose == 0
    assert spent == books.charged
    assert held == 0


def _open(server: ServerProcess) -> list[Auction]:
    """The demo's line items, with enough grace for a restart, and its auctions."""
    planned = garden.line_items()
    with _client(server) as http:
        for one in planned:
            answer = http.post("/v1/line-items", json={**one.body, "grace_s": 12})
            assert answer.status_code == 201
    return garden.market(planned, AUCTIONS, seed=11)


def _client(server: ServerProcess) -> httpx.Client:
    headers = {"Authorization": f"Bearer {server.key}"}
    return httpx.Client(base_url=server.address, headers=headers, timeout=10)


def _statuses(http: httpx.Client, rows: Rows) -> list[str]:
    statuses: list[str] = []
    for first in range(0, len(rows), 500):
        part = {"outcomes": rows[first : first + 500]}
        answer = http.post("/v1/outcomes", json=part).raise_for_status()
        statuses += [result["status"] for result in answer.json()["results"]]
    return statuses


def _held_after_grace(url: str) -> int:
    """What is still held once lease and grace of every slice are over; waits at most 30 s."""
    until = time.monotonic() + 30
    with closing(Database(url)) as database:
        while (held := database.read(_held)) and time.monotonic() < until:
            time.sleep(0.2)
    return held


def _held(connection: Reading) -> int:
    return int(connection.execute(text("SELECT sum(held) FROM balance")).scalar_one())


def _spent(connection: Reading) -> dict[str, int]:
    rows = connection.execute(text("SELECT line_item, spent FROM balance WHERE spent > 0"))
    return {row.line_item: row.spent for row in rows}


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_a_price_that_left_before_the_kill_is_still_settled(
    migrated_url: str, tmp_path: Path
) -> None:
    """A win whose decision died with the worker is booked by its ticket, within its hold."""
    settings = SETTINGS | {"BIDKEEL_DATABASE_URL": migrated_url}
    with ServerProcess(tmp_path, settings) as server:
        _open(server)
        with _client(server) as http:
            bid = http.post("/v1/bids", json={"line_item": "garden-film"}).json()
            server.stop(signal.SIGKILL)
        server.start()
        with _client(server) as http:
            won = {"ticket": bid["ticket"], "kind": "won", "clearing_cpm": 1}
            assert _statuses(http, [won]) == ["recorded"]
            money_now = http.get("/v1/line-items/garden-film/state").json()["money"]
    assert money_now["spent"] == "0.001"
