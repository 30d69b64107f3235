"""Hundreds of idle connections and slow senders: whoever has something to say still gets in."""

from __future__ import annotations

import socket
import time
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path

import httpx
import pytest

from service.commands.server_process import HOST, ServerProcess
from tests.api.test_hostile import LINE_ITEM

IDLE = 400
SLOW = 100
HALF_A_REQUEST = b"POST /v1/outcomes HTTP/1.1\r\nHost: x\r\nContent-Length: 1000000\r\nX-Slow: "


@pytest.fixture
def crowded(tmp_path: Path) -> Iterator[ServerProcess]:
    """A server to which hundreds are connected, some of them in the middle of a request."""
    with ServerProcess(tmp_path) as server, ExitStack() as stack:
        for number in range(IDLE + SLOW):
            guest = stack.enter_context(socket.create_connection((HOST, server.port), 5))
            if number < SLOW:
                guest.sendall(HALF_A_REQUEST)
        yield server


def test_idle_and_slow_connections_shut_nobody_out(crowded: ServerProcess) -> None:
    """Bids are answered and outcomes recorded, each in a moment."""
    headers = {"Authorization": f"Bearer {crowded.key}"}
    with httpx.Client(base_url=crowded.address, headers=headers, timeout=5) as http:
        assert http.post("/v1/line-items", json=LINE_ITEM).status_code == 201
        took = []
        for _ in range(50):
            began = time.monotonic()
            bid = http.post("/v1/bids", json={"line_item": LINE_ITEM["id"]}).json()
            if bid["ticket"]:
                lost = {"outcomes": [{"ticket": bid["ticket"], "kind": "lost"}]}
                results = http.post("/v1/outcomes", json=lost).json()["results"]
                assert results[0]["status"] == "recorded"
            took.append(time.monotonic() - began)
    # Far above what is measured, far below what waiting for any of the slow would take.
    assert sorted(took)[25] < 0.5
