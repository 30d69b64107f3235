"""What an installation gets: the whole service, its migrations, its command, pinned versions."""

from __future__ import annotations

import re
import shutil
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from importlib import metadata
from pathlib import Path
from typing import Any
from zipfile import ZipFile

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name

from tests.house import ROOT

CARRIED = {".py", ".mako", ".html", ".css", ".js", ".png"}
NEEDED = ("pyproject.toml", "README.md", "LICENSE", "service", "migrations")


@pytest.fixture(scope="module")
def project() -> dict[str, Any]:
    """What pyproject.toml says."""
    return tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> ZipFile:
    """The wheel as an installation would build it, from a copy that holds no leftovers."""
    copy = tmp_path_factory.mktemp("source")
    for name in NEEDED:
        if (ROOT / name).is_dir():
            shutil.copytree(ROOT / name, copy / name)
        else:
            shutil.copy(ROOT / name, copy / name)
    command = [sys.executable, "-m", "pip", "wheel", "--quiet", "--disable-pip-version-check"]
    command += ["--no-deps", "--no-build-isolation", "--wheel-dir", str(copy / "built"), str(copy)]
    done = subprocess.run(command, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    (built,) = (copy / "built").glob("bidkeel-*.whl")
    return ZipFile(built)


def installed_paths(folder: str, inside: str) -> set[str]:
    """Where the files of a folder of the checkout belong once installed."""
    files = [p for p in (ROOT / folder).rglob("*") if p.suffix in CARRIED]
    return {(Path(inside) / p.relative_to(ROOT / folder)).as_posix() for p in files}


def test_the_list_of_packages_is_the_list_of_folders(project: dict[str, Any]) -> None:
    """A new folder of the service is named in pyproject.toml, or it would not be installed."""
    folders = {p.parent.relative_to(ROOT) for p in (ROOT / "service").rglob("*.py")}
    expected = {".".join(folder.parts) for folder in folders}
    expected |= {"service.migrations", "service.migrations.versions"}
    assert sorted(project["tool"]["setuptools"]["packages"]) == sorted(expected)


def test_the_wheel_carries_the_service_and_its_migrations(wheel: ZipFile) -> None:
    """Every module, migration and template is installed, and nothing but the service."""
    code = {name for name in wheel.namelist() if ".dist-info/" not in name}
    expected = installed_paths("service", "service")
    expected |= installed_paths("migrations", "service/migrations")
    assert code == expected
    assert {"service/migrations/env.py", "service/migrations/script.py.mako"} <= code
    assert any(name.startswith("service/migrations/versions/") for name in code)


def test_the_wheel_gives_the_command(wheel: ZipFile, project: dict[str, Any]) -> None:
    """The command bidkeel starts the function that pyproject.toml names."""
    (entry,) = [name for name in wheel.namelist() if name.endswith("entry_points.txt")]
    assert "bidkeel = service.__main__:main" in wheel.read(entry).decode()
    assert project["project"]["scripts"] == {"bidkeel": "service.__main__:main"}


def test_the_command_answers() -> None:
    """The command line explains itself and ends well."""
    command = [sys.executable, "-m", "service", "--help"]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert "serve" in done.stdout


def pinned() -> set[str]:
    """The names that deploy/constraints.txt pins, in their normal form."""
    lines = (ROOT / "deploy" / "constraints.txt").read_text("utf-8").splitlines()
    return {canonicalize_name(line.partition("==")[0]) for line in lines}


def closure(requirements: list[str], extras: frozenset[str] = frozenset()) -> Iterator[str]:
    """Every name that these requirements lead to, here and with these extras."""
    for requirement in map(Requirement, requirements):
        environments = [{"extra": extra} for extra in extras or {""}]
        marker = requirement.marker
        if marker is None or any(marker.evaluate(environment) for environment in environments):
            yield canonicalize_name(requirement.name)
            asked = metadata.requires(requirement.name) or []
            yield from closure(asked, frozenset(requirement.extras))


@pytest.mark.parametrize("group", ["service", "test"])
def test_everything_installed_is_pinned(project: dict[str, Any], group: str) -> None:
    """No package comes in at a version that nobody chose."""
    groups = project["project"]["optional-dependencies"]
    asked = groups["test"] if group == "test" else project["project"]["dependencies"]
    assert sorted(set(closure(asked)) - pinned()) == []


def test_the_real_auctions_are_pinned_in_both_places(project: dict[str, Any]) -> None:
    """The data file that is read by its name stays the same file."""
    assert project["project"]["optional-dependencies"]["real"] == ["simple-fpa==1.8"]
    lines = (ROOT / "deploy" / "constraints.txt").read_text("utf-8").splitlines()
    assert [line for line in lines if re.match(r"simple[-_]fpa==", line)] == ["simple_fpa==1.8"]


@pytest.mark.parametrize("script", ["deploy/test", "deploy/try", ".ci/run"])
def test_scripts_stop_at_the_first_mistake(script: str) -> None:
    """A script that runs on after a failed step reports a success that was none."""
    assert re.search(r"^set -eu", (ROOT / script).read_text("utf-8"), re.MULTILINE)


@pytest.mark.parametrize("script", ["deploy/test", "deploy/try"])
def test_an_old_python_is_refused_in_a_sentence(script: str, tmp_path: Path) -> None:
    """Where Python is too old, a script says so before it makes anything."""
    old = tmp_path / "python"
    old.write_text("#!/bin/sh\nexit 1\n")  # What an older Python answers to the question.
    old.chmod(0o755)
    environment = {"PYTHON": str(old), "PATH": "/usr/bin:/bin"}
    command = ["/bin/sh", str(ROOT / script)]
    done = subprocess.run(command, env=environment, capture_output=True, text=True)
    assert done.returncode == 2
    assert "Python 3.11 or newer is needed" in done.stderr
