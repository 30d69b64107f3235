"""A real server process of our own, apart so that demo, bench and tests start it the same way."""

from __future__ import annotations

import contextlib
import json
import os
import secrets
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Mapping
from http.client import HTTPConnection, HTTPException
from pathlib import Path
from types import TracebackType
from typing import Self

import service
from service.commands import pinning
from service.commands.wire import Wire
from service.errors import BidkeelError

HOST = "127.0.0.1"
PORTS = range(20_000, 32_000)
READY_S_MAX = 60.0
STOP_S_MAX = 30.0
_POLL_S = 0.05
_ASK_S_MAX = 5.0
_TAIL_CHARACTERS = 2000


class ServerFailed(BidkeelError):
    """The server process did not start, ended early or would not stop."""


class ServerProcess:
    """
    One `serve` child on a free port of this machine, with its own SQLite file.

    Args:
        directory: Where the database and the log lie; a second start finds them again.
        settings: Further `BIDKEEL_` settings, by their full names.
    """

    def __init__(self, directory: Path, settings: Mapping[str, str] | None = None) -> None:
        self.directory = directory
        self.port = free_port()
        self.address = f"http://{HOST}:{self.port}"
        self.key = ""
        self.environment = {**inherited(), **database(directory), **self._place()}
        self.environment.update(settings or {})
        self.child: subprocess.Popen[bytes] | None = None

    def __enter__(self) -> Self:
        self.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.stop()

    def wire(self) -> Wire:
        """A client for this server, with the admin key."""
        return Wire(HOST, self.port, self.key)

    @property
    def log_path(self) -> Path:
        """The file that takes what the server writes to its two outputs."""
        return self.directory / "server.log"

    def start(self) -> None:
        """
        Start the server, wait until it is ready and make an admin key.

        Raises:
            ServerFailed: It ended, or was not ready within `READY_S_MAX` seconds.
        """
        with self.log_path.open("ab") as log:
            self.child = subprocess.Popen(  # noqa: S603 - Our own fixed command line.
                command("serve"), env=self.environment, stdout=log, stderr=subprocess.STDOUT
            )
        try:
            self._wait_until_ready()
            # A second start finds the key of the first in its database.
            self.key = self.key or self.new_key("demo", "admin")
        # Ctrl-C during the start must not leave a server behind either.
        except BaseException:
            self.stop(signal.SIGKILL)
            raise

    def stop(self, how: signal.Signals = signal.SIGTERM) -> int | None:
        """
        End the server and return its exit code, None when none was running.

        By SIGKILL the whole crew ends at once, as when a machine loses power.

        Raises:
            ServerFailed: It did not end within `STOP_S_MAX` seconds and was killed.
        """
        child, self.child = self.child, None
        if child is None:
            return None
        crew = pinning.children(child.pid) if how == signal.SIGKILL else []
        child.send_signal(how)
        for one in crew:
            with contextlib.suppress(ProcessLookupError):
                os.kill(one, how)
        try:
            return child.wait(STOP_S_MAX)
        except subprocess.TimeoutExpired:
            child.kill()
            child.wait()
            raise ServerFailed(f"The server did not stop. {self.tail()}") from None

    def wait(self) -> None:
        """Wait until the server ends by itself or by somebody else's hand."""
        if self.child is not None:
            self.child.wait()

    def new_key(self, name: str, scopes: str) -> str:
        """
        Make a key with the comma-separated scopes, by the command beside the server.

        Raises:
            ServerFailed: The command failed.
        """
        made = subprocess.run(  # noqa: S603 - Our own command line, never through a shell.
            command("keys", "add", "--json", "--name", name, "--scopes", scopes),
            env=self.environment,
            capture_output=True,
            check=False,
            text=True,
        )
        if made.returncode != 0:
            raise ServerFailed(f"No key could be made. {made.stderr[-_TAIL_CHARACTERS:]}")
        return str(json.loads(made.stdout)["key"])

    def tail(self) -> str:
        """The end of the server's log, for an error message."""
        return self.log_path.read_text(errors="replace")[-_TAIL_CHARACTERS:]

    def _place(self) -> dict[str, str]:
        return {"BIDKEEL_HOST": HOST, "BIDKEEL_PORT": str(self.port)}

    def _wait_until_ready(self) -> None:
        end = time.monotonic() + READY_S_MAX
        while time.monotonic() < end:
            if self.child is None or self.child.poll() is not None:
                raise ServerFailed(f"The server ended while starting. {self.tail()}")
            if is_ready(self.port, self.environment.get("BIDKEEL_HEALTH_KEY")):
                return
            time.sleep(_POLL_S)
        raise ServerFailed(f"The server was not ready in {READY_S_MAX:.0f} s. {self.tail()}")


def command(*words: str) -> list[str]:
    """The command line of this package, run by the same interpreter."""
    return [sys.executable, "-m", "service", *words]


def is_ready(port: int, health_key: str | None = None) -> bool:
    """Whether a server on the port of this machine answers that it is ready."""
    headers = {} if health_key is None else {"Authorization": f"Bearer {health_key}"}
    connection = HTTPConnection(HOST, port, timeout=_ASK_S_MAX)
    try:
        connection.request("GET", "/health/ready", headers=headers)
        return connection.getresponse().status == 200
    except (OSError, HTTPException):
        return False
    finally:
        connection.close()


def free_port() -> int:
    """A port that nobody listened on a moment ago, and that no outgoing connection takes."""
    # Were it one of those the system gives out, a killed server might not find it free again.
    first = secrets.randbelow(len(PORTS))
    for place in range(len(PORTS)):
        port = PORTS[(first + place) % len(PORTS)]
        with socket.socket() as probe, contextlib.suppress(OSError):
            probe.bind((HOST, port))
            return port
    raise ServerFailed("No port is free.")


def database(directory: Path) -> dict[str, str]:
    """The setting that names a SQLite file inside the directory."""
    return {"BIDKEEL_DATABASE_URL": f"sqlite:///{directory / 'bidkeel.sqlite'}"}


def inherited() -> dict[str, str]:
    """This process's environment without its own settings, and with this package on the path."""
    kept = {name: text for name, text in os.environ.items() if not name.startswith("BIDKEEL_")}
    parts = [str(Path(service.__file__).parent.parent), kept.get("PYTHONPATH", "")]
    return {**kept, "PYTHONPATH": os.pathsep.join(part for part in parts if part)}
