"""A consistent copy of the whole database, and putting it back as a new life of it.

What was spent after the copy is unknown to it, so every line item waits for its spend to be
confirmed, and tickets from before take the late way.
"""

from __future__ import annotations

import os
import secrets
import shutil
import sqlite3
import subprocess
import tempfile
from contextlib import closing
from pathlib import Path

from sqlalchemy import text
from sqlalchemy.engine import make_url

from service.errors import Unsafe
from service.store.database import Database, Reading

SQLITE_HEAD = b"SQLite format 3\0"
DUMP_HEAD = b"--\n-- PostgreSQL database dump"
REASON = "restored from a backup: confirm what was spent"
# Adopts the rows of the restore with the next row that is sealed; see `chain`.
OPEN = "UPDATE journal_head SET elders = '[\"restore\"]' WHERE id = 1"
# A backup of a release that had no chain is restored too, and sealed when it is migrated.
_CHAINED = "SELECT 1 FROM sqlite_master WHERE name = 'journal_head'"
_OPEN_IF = f"DO $$ BEGIN IF to_regclass('journal_head') IS NOT NULL THEN {OPEN}; END IF; END $$"


def back_up(url: str, path: Path) -> None:
    """
    Write a copy of the database at `url` while others use it.

    Raises:
        Unsafe: The file is there already, or the tool for it is not.
    """
    if path.exists():
        raise Unsafe(f"There is a file {path} already; a backup overwrites nothing.")
    partly = path.with_name(f"{path.name}.{secrets.token_hex(4)}.part")
    try:
        if url.startswith("sqlite:///"):
            _copy_sqlite(Path(url.removeprefix("sqlite:///")), partly)
        else:
            _dump(url, partly)
        _make_durable(partly)
        # Only a whole file gets the name; a link does not overwrite, as a rename would.
        os.link(partly, path)
    except FileExistsError as error:
        raise Unsafe(f"There is a file {path} already; a backup overwrites nothing.") from error
    finally:
        partly.unlink(missing_ok=True)
    # A new name survives a power cut only once its directory is on the disk too.
    _make_durable(path.parent)


def restore(url: str, path: Path, now_ms: int) -> Path | None:
    """
    Put a backup in place of the database at `url`, which nobody may serve meanwhile.

    Returns:
        Where the SQLite file from before lies, if there was one.

    Raises:
        Unsafe: No backup for this kind of database, a damaged one, or somebody is connected.
    """
    head = _head(path)
    if url.startswith("sqlite:///"):
        if not head.startswith(SQLITE_HEAD):
            raise Unsafe("This file is no backup of a SQLite database.")
        return _replace_sqlite(Path(url.removeprefix("sqlite:///")), path, now_ms)
    if not head.startswith(DUMP_HEAD):
        raise Unsafe("This file is no backup of a PostgreSQL database.")
    _load_dump(url, path, now_ms)
    return None


def new_life(now_ms: int, *, sealed: str) -> list[str]:
    """
    The statements that make a restored copy safe; without parameters, for psql takes none.

    Args:
        sealed: Opens the chain of the journal for the rows that stand here, where there is one.
    """
    fresh, now = secrets.token_hex(8), int(now_ms)
    detail = f'{{"incarnation": "{fresh}"}}'
    # Built of our own words, hex and integers only.
    said = f"SELECT {now}, 'bidkeel', 'restore', id, '{REASON}', '{detail}' FROM line_item"  # noqa: S608
    # Without `WHERE true` SQLite would read ON as the condition of a join.
    who = f"SELECT id, 'restore', {now}, 'bidkeel', '{REASON}' FROM line_item WHERE true"  # noqa: S608
    return [
        f"UPDATE fact SET value = '{fresh}' WHERE name = 'incarnation'",  # noqa: S608
        # By service time, which stood still, the workers of the copy would still seem to live.
        "DELETE FROM worker",
        "INSERT INTO freezing (line_item, source, at_ms, actor, reason)"
        f" {who} ON CONFLICT DO NOTHING",
        f"INSERT INTO journal (at_ms, actor, action, line_item, reason, detail) {said}",
        sealed,
    ]


def _copy_sqlite(database: Path, path: Path) -> None:
    if not database.exists():
        raise Unsafe(f"There is no database {database}.")
    with closing(sqlite3.connect(database, timeout=30)) as connection:
        # One read view: writers go on, and what they write meanwhile is not in the copy.
        connection.execute("VACUUM INTO ?", (str(path),))


def _replace_sqlite(database: Path, path: Path, now_ms: int) -> Path | None:
    coming = database.with_name(f"{database.name}.restoring")
    # Beside the database, so that the last step is a rename within one file system.
    shutil.copyfile(path, coming)
    try:
        _begin_life(coming, now_ms)
    except sqlite3.Error as error:
        coming.unlink()
        raise Unsafe(f"This backup is damaged or of another release: {error}.") from error
    # Whole on the disk before it gets the name, for a power cut may come in between.
    _make_durable(coming)
    kept = _keep_old(database)
    os.replace(coming, database)
    _make_durable(database.parent)
    return kept


def _begin_life(coming: Path, now_ms: int) -> None:
    with closing(sqlite3.connect(coming)) as connection:
        (said,) = connection.execute("PRAGMA integrity_check").fetchone()
        if said != "ok":
            raise sqlite3.DatabaseError(said)
        with connection:
            chained = connection.execute(_CHAINED).fetchone()
            for statement in new_life(now_ms, sealed=OPEN if chained else "SELECT 1"):
                connection.execute(statement)


def _keep_old(database: Path) -> Path | None:
    """Give the file from before another name beside; its log must not meet the new file."""
    if not database.exists():
        return None
    kept = database.with_name(f"{database.name}.before-{secrets.token_hex(4)}")
    try:
        with closing(sqlite3.connect(database)) as connection:
            # What only its log holds is brought into the file, which is then whole by itself.
            connection.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
    except sqlite3.Error:
        # Too damaged to be opened: its log goes along, for whoever wants to look.
        pass
    for ending in ("-wal", "-shm"):
        beside = database.with_name(database.name + ending)
        if beside.exists():
            beside.rename(kept.with_name(kept.name + ending))
    # A link, so that the name is never without a file until the new one takes it over.
    os.link(database, kept)
    return kept


def _dump(url: str, path: Path) -> None:
    words = ["--no-owner", "--no-privileges", "--clean", "--if-exists", f"--file={path}"]
    _run("pg_dump", url, words)


def _load_dump(url: str, path: Path, now_ms: int) -> None:
    _refuse_company(url)
    with tempfile.NamedTemporaryFile("w", suffix=".sql") as after:
        # The dump leaves the search path empty.
        after.write(";\n".join(["RESET search_path", *new_life(now_ms, sealed=_OPEN_IF)]) + ";\n")
        after.flush()
        # One transaction: either all of it is the restored database, or nothing has changed.
        words = ["--no-psqlrc", "--quiet", "--single-transaction", "--set=ON_ERROR_STOP=1"]
        _run("psql", url, [*words, f"--file={path}", f"--file={after.name}"])


def _refuse_company(url: str) -> None:
    database = Database(url)
    try:
        others = database.read(_others)
    finally:
        database.close()
    if others:
        raise Unsafe(f"{others} others are connected to this database; stop every worker first.")


def _others(connection: Reading) -> int:
    statement = text(
        "SELECT count(*) FROM pg_stat_activity WHERE datname = current_database()"
        " AND pid <> pg_backend_pid() AND backend_type = 'client backend'"
    )
    return int(connection.execute(statement).scalar_one())


def _run(tool: str, url: str, words: list[str]) -> None:
    found = shutil.which(tool)
    if found is None:
        raise Unsafe(f"This needs {tool} of PostgreSQL's client programs; it is not installed.")
    parts = make_url(url)
    where = parts.set(drivername="postgresql", password=None).render_as_string()
    # A password on the command line could be read by everybody on this machine.
    secret = {} if parts.password is None else {"PGPASSWORD": str(parts.password)}
    done = subprocess.run(  # noqa: S603
        [found, f"--dbname={where}", *words],
        env={**os.environ, **secret},
        capture_output=True,
        text=True,
        check=False,
    )
    if done.returncode:
        lines = done.stderr.splitlines()
        said = [line for line in lines if "error" in line.lower()] + lines
        why = said[0] if said else f"exit code {done.returncode}"
        raise Unsafe(f"{tool} failed and nothing was changed: {why}")


def _head(path: Path) -> bytes:
    if not path.is_file():
        raise Unsafe(f"There is no file {path}.")
    with path.open("rb") as file:
        return file.read(64)


def _make_durable(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
