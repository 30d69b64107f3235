"""The first release, out of the history of this repository, to be run beside the present code."""

from __future__ import annotations

import io
import subprocess
import tarfile
from pathlib import Path

from service.commands.server_process import ServerProcess
from tests.house import ROOT

# A busy machine takes longer than an exchange would wait.
PATIENT = {"BIDKEEL_DEADLINE_MS": "2000", "BIDKEEL_DEADLINE_MS_MAX": "2000"}
COMMIT = "b2a2568"  # The first release, with migration 0001 only.


def unpack(folder: Path) -> Path:
    """Its code, as it was released; needs a clone with its history."""
    command = ["git", "-C", str(ROOT), "archive", "--format=tar", COMMIT, "service", "migrations"]
    done = subprocess.run(command, capture_output=True)
    assert done.returncode == 0, f"{COMMIT} is not in this clone: {done.stderr.decode()}"
    with tarfile.open(fileobj=io.BytesIO(done.stdout)) as archive:
        archive.extractall(folder, filter="data")
    return folder


def server(folder: Path, code: Path | None, url: str) -> ServerProcess:
    """One server on the database: of the code unpacked there, else of the present code."""
    folder.mkdir(parents=True)
    settings = {"BIDKEEL_DATABASE_URL": url, **PATIENT}
    if code is not None:
        # Else Python would look into the working directory first, and find the present code.
        settings |= {"PYTHONPATH": str(code), "PYTHONSAFEPATH": "1"}
    return ServerProcess(folder, settings)
