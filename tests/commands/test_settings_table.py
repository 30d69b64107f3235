"""The reference of settings is made from the class, and the page that shows it is current."""

from __future__ import annotations

import json
import re

import pytest

from service.__main__ import main
from service.commands.settings_table import markdown, rows
from service.settings import Settings
from tests.house import ROOT


def test_the_page_for_platform_teams_is_current() -> None:
    """Whoever adds a setting prints the table again: bidkeel settings --markdown."""
    page = (ROOT / "deploy" / "README.md").read_text("utf-8")
    assert page.endswith(f"\n\n{markdown()}")


def test_every_setting_is_there_once() -> None:
    """In the order of the class, with default and reason."""
    assert [row["name"] for row in rows()] == [
        f"BIDKEEL_{name.upper()}" for name in Settings.model_fields
    ]
    by_name = {row["name"]: row for row in rows()}
    assert by_name["BIDKEEL_PORT"]["default"] == "8080"
    assert by_name["BIDKEEL_HEALTH_KEY"]["default"] == ""
    assert by_name["BIDKEEL_LEASE_S"]["description"].startswith("Seconds")


@pytest.mark.parametrize("words", [[], ["--markdown"], ["--json"]])
def test_each_form_names_all(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    """For a look, for a page, for a program."""
    assert main(["settings", *words]) == 0
    said = capsys.readouterr().out
    assert [row["name"] for row in rows() if row["name"] not in said] == []
    if words == ["--json"]:
        assert json.loads(said)["settings"] == rows()


def test_what_is_set_here_is_not_shown() -> None:
    """The table tells what may be set, never what somebody has set."""
    assert "SecretStr" not in markdown()
    assert "**" not in markdown()


def test_files_named_for_platform_teams_exist() -> None:
    """Every file in the table of the page is there."""
    page = (ROOT / "deploy" / "README.md").read_text("utf-8")
    table = page.partition("## What runs")[0]
    names = re.findall(r"`([a-zA-Z./]+)`", table)
    assert len(names) > 10
    gone = [name for name in names if not (ROOT / "deploy" / name).exists()]
    assert gone == ["Dockerfile"]
    assert (ROOT / "Dockerfile").is_file()
