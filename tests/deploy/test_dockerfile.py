"""The image, as far as it can be held without a container engine: its steps, done in a folder."""

from __future__ import annotations

import os
import re
import shlex
import site
import subprocess
import sys
from pathlib import Path

import pytest

from service.commands.ready import is_ready
from service.commands.server_process import ServerProcess, free_port
from tests.house import ROOT

INSIDE = "/opt/bidkeel"


def instructions() -> list[tuple[str, str]]:
    """Every instruction with its text, continued lines joined and comments left out."""
    text = re.sub(r"^#.*\n", "", (ROOT / "Dockerfile").read_text("utf-8"), flags=re.MULTILINE)
    lines = text.replace("\\\n", " ").splitlines()
    return [
        (word, rest.strip()) for word, _, rest in (line.partition(" ") for line in lines) if word
    ]


def build_steps() -> list[str]:
    """What the first stage runs."""
    second = [place for place, (word, _) in enumerate(instructions()) if word == "FROM"][1]
    return [text for word, text in instructions()[:second] if word == "RUN"]


def performed(folder: Path, environment: dict[str, str]) -> Path:
    """Copy what the image copies, run what it runs, and return what it installed into."""
    source, installed = folder / "src", folder / "opt"
    for word, text in instructions():
        if word == "COPY" and "--from" not in text:
            *names, target = text.split()
            for name in names:
                place = source / target / ("" if target != "./" else name)
                place = source / name if target == "./" else source / target
                place.parent.mkdir(parents=True, exist_ok=True)
                subprocess.run(["cp", "-r", str(ROOT / name), str(place)], check=True)  # noqa: S607
    first = str(Path(sys.executable).parent)
    given = {**os.environ, "PATH": f"{first}:{os.environ['PATH']}", **environment}
    for step in build_steps():
        done = subprocess.run(
            ["/bin/sh", "-euc", step.replace(INSIDE, str(installed))],
            cwd=source, env=given, capture_output=True, text=True,
        )  # fmt: skip
        assert done.returncode == 0, f"{step}\n{done.stdout}{done.stderr}"
    return installed


def said(installed: Path, environment: dict[str, str], *words: str) -> str:
    """What the installed command says."""
    command = [str(installed / "bin" / "bidkeel"), *words]
    done = subprocess.run(
        command,
        env={"PATH": "/usr/bin:/bin", **environment},
        cwd="/",
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_its_steps_install_the_service(tmp_path: Path) -> None:
    """In a clean environment; what the service depends on is borrowed, unlike in the long form."""
    # Without what it depends on, and with a build tool from here, nothing is fetched.
    installed = performed(tmp_path, {"PIP_NO_DEPS": "1", "PIP_NO_BUILD_ISOLATION": "1"})
    assert not list(installed.glob("lib/*/site-packages/pip"))
    (folder,) = installed.glob("lib/*/site-packages/service")
    assert (folder / "migrations" / "versions" / "0001_first_light.py").is_file()
    borrowed = {"PYTHONPATH": os.pathsep.join(site.getsitepackages())}
    assert "serve" in said(installed, borrowed, "--help")


@pytest.mark.long
def test_its_steps_install_everything(tmp_path: Path) -> None:
    """With every pinned dependency and nothing borrowed, the service migrates and audits."""
    installed = performed(tmp_path, {})
    url = {"BIDKEEL_DATABASE_URL": f"sqlite:///{tmp_path / 'fresh.db'}"}
    assert "schema of this release" in said(installed, url, "migrate")
    assert "0 differences" in said(installed, url, "audit")


def test_it_runs_as_nobody_special_and_writes_only_its_data() -> None:
    """Not root by number, so that a cluster can check it; settings name the folder that is kept."""
    last = {word: text for word, text in instructions()}
    assert last["USER"] == "10001:10001"
    assert last["WORKDIR"] == last["VOLUME"] == "/data"
    assert "BIDKEEL_DATABASE_URL=sqlite:////data/" in last["ENV"]
    assert last["CMD"] == '["bidkeel", "serve"]'
    stages = [text for word, text in instructions() if word == "FROM"]
    # The build tools stay behind: the second stage takes one folder from the first.
    assert len(stages) == 2
    taken = [text for word, text in instructions() if word == "COPY" and "--from" in text]
    assert taken == [f"--from=build {INSIDE} {INSIDE}"]


def test_what_it_copies_is_let_in() -> None:
    """The list of what a build may see names all that is copied, and lets no database in."""
    listed = (ROOT / ".dockerignore").read_text("utf-8").split()
    copied = [t.split()[:-1] for w, t in instructions() if w == "COPY" and "--from" not in t]
    assert {f"!{name}" for names in copied for name in names} <= set(listed)
    assert listed[1 + listed.index("in.") :][0] == "*"


def test_its_check_of_health_asks_the_server(tmp_path: Path) -> None:
    """0 from a server that can price, 1 where nobody listens or the key is another."""
    (check,) = [text for word, text in instructions() if word == "HEALTHCHECK"]
    command = shlex.split(check.partition("CMD ")[2].strip("[]").replace(",", ""))
    assert command == ["python", "-m", "service.commands.ready"]
    key = "k" * 32
    with ServerProcess(tmp_path) as server:
        assert is_ready(server.port, None)
        environment = {**server.environment, "BIDKEEL_HEALTH_KEY": key}
        assert subprocess.run([sys.executable, *command[1:]], env=environment).returncode == 0
        nobody = {**environment, "BIDKEEL_PORT": str(free_port())}
        assert subprocess.run([sys.executable, *command[1:]], env=nobody).returncode == 1
