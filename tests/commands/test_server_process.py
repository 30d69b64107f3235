"""A server process starts on its own port and database, answers, and stops when told."""

from __future__ import annotations

import os
import signal
from pathlib import Path

import httpx
import pytest

from service.commands import server_process
from service.commands.server_process import ServerFailed, ServerProcess


def line_items(server: ServerProcess, key: str) -> httpx.Response:
    """Ask for the line items with a key."""
    return httpx.get(f"{server.address}/v1/line-items", headers={"Authorization": f"Bearer {key}"})


def test_it_is_ready_takes_its_key_and_stops_when_told(tmp_path: Path) -> None:
    """It ends by that signal after closing its books, and nobody listens afterwards."""
    server = ServerProcess(tmp_path)
    server.start()
    assert line_items(server, server.key).status_code == 200
    assert line_items(server, "not-a-key").status_code == 401
    assert server.stop() in (0, -signal.SIGTERM)
    assert "Application shutdown complete" in server.tail()
    assert not server_process.is_ready(server.port)


def test_a_second_start_finds_the_same_database(tmp_path: Path) -> None:
    """A killed server comes back on the same port, and the old key still opens it."""
    with ServerProcess(tmp_path) as server:
        assert server.stop(signal.SIGKILL) == -signal.SIGKILL
        server.start()
        assert line_items(server, server.key).status_code == 200


def test_a_server_that_cannot_start_says_why(tmp_path: Path) -> None:
    """The end of its log stands in the error, and no process is left behind."""
    server = ServerProcess(tmp_path, {"BIDKEEL_PORT": "not-a-port"})
    with pytest.raises(ServerFailed, match=r"ended while starting[\s\S]*PORT"):
        server.start()
    assert server.child is None


def test_a_key_that_cannot_be_made_is_an_error(tmp_path: Path) -> None:
    """The command's own words stand in it."""
    with ServerProcess(tmp_path) as server, pytest.raises(ServerFailed, match="No key"):
        server.new_key("demo", "no-such-scope")


def test_settings_of_the_caller_do_not_leak_into_the_child(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A demo never touches the database that this shell serves."""
    monkeypatch.setenv("BIDKEEL_DATABASE_URL", "sqlite:////somewhere/else")
    monkeypatch.setenv("BIDKEEL_WORKERS", "9")
    environment = ServerProcess(tmp_path).environment
    assert str(tmp_path) in environment["BIDKEEL_DATABASE_URL"]
    assert "BIDKEEL_WORKERS" not in environment
    assert environment["PATH"] == os.environ["PATH"]
