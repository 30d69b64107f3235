"""Alerts and dashboard held against the metrics that exist, by Prometheus's own tool and by us."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from pathlib import Path
from typing import Any

import pytest
import yaml

from service.metrics.board import Board
from service.metrics.exposition import Exposition
from tests.house import ROOT

PROMETHEUS = ROOT / "deploy" / "prometheus"
TESTS = ROOT / "tests" / "deploy" / "promtool" / "alerts_test.yml"
METRIC = re.compile(r"\bbidkeel_[a-z_]+")


def rules() -> list[dict[str, Any]]:
    """Every alert as it stands in the file."""
    groups = yaml.safe_load((PROMETHEUS / "alerts.yml").read_text("utf-8"))["groups"]
    return [rule for group in groups for rule in group["rules"]]


def panels() -> list[dict[str, Any]]:
    """Every panel of the dashboard that shows something."""
    board = json.loads((PROMETHEUS / "dashboard.json").read_text("utf-8"))
    return [panel for panel in board["panels"] if panel["type"] != "row"]


def expressions() -> list[str]:
    """All that alerts and dashboard ask Prometheus."""
    asked = [rule["expr"] for rule in rules()]
    return asked + [target["expr"] for panel in panels() for target in panel["targets"]]


def told() -> set[str]:
    """Every name that a scrape may bring, with the endings that Prometheus gives them."""
    text = Exposition(Board.alone(), {"version": "1"}).text().decode()
    kinds = dict(re.findall(r"^# TYPE (\S+) (\S+)$", text, re.MULTILINE))
    histograms = [name for name, kind in kinds.items() if kind == "histogram"]
    endings = {f"{name}{end}" for name in histograms for end in ("_bucket", "_count", "_sum")}
    return set(kinds) | endings


def promtool(
    folder: Path, *words: str, spoilt: tuple[str, str] = ("\0", "")
) -> subprocess.CompletedProcess[str]:
    """Prometheus's own tool, on copies, since its files name one another by place."""
    tool = shutil.which("promtool")
    assert tool, "promtool is not installed; Debian's package prometheus carries it"
    for path in (*PROMETHEUS.glob("*.yml"), TESTS):
        shutil.copy(path, folder / path.name)
    alerts = (folder / "alerts.yml").read_text("utf-8").replace(*spoilt)
    (folder / "alerts.yml").write_text(alerts)
    return subprocess.run([tool, *words], cwd=folder, capture_output=True, text=True)


@pytest.mark.parametrize(
    "words",
    [
        ("check", "rules", "alerts.yml"),
        ("check", "config", "prometheus.yml"),
        ("test", "rules", "alerts_test.yml"),
    ],
    ids=lambda words: "-".join(words[:2]),
)
def test_the_tool_finds_nothing(words: tuple[str, ...], tmp_path: Path) -> None:
    """Rules and configuration are sound, and each alert fires when it should and only then."""
    done = promtool(tmp_path, *words)
    assert done.returncode == 0, done.stdout + done.stderr


def test_the_tool_would_find_an_alert_that_does_not_fire(tmp_path: Path) -> None:
    """A bound that is never reached fails its own test, so the tests above can fail."""
    done = promtool(tmp_path, "test", "rules", "alerts_test.yml", spoilt=("> 0.05", "> 5"))
    assert done.returncode != 0
    assert "BidkeelSlowBids" in done.stderr + done.stdout


def test_every_alert_has_a_case_that_fires_and_one_that_does_not() -> None:
    """An alert whose silence was never seen may fire for ever, and the other way round."""
    cases = yaml.safe_load(TESTS.read_text("utf-8"))["tests"]
    seen = {(t["alertname"], bool(t["exp_alerts"])) for c in cases for t in c["alert_rule_test"]}
    assert seen == {(rule["alert"], fires) for rule in rules() for fires in (True, False)}


def test_every_metric_asked_for_exists() -> None:
    """A name that nobody tells makes an alert that never fires."""
    asked = {name for expression in expressions() for name in METRIC.findall(expression)}
    assert len(asked) > 30
    assert sorted(asked - told()) == []


def test_every_alert_leads_to_its_page() -> None:
    """Whoever is woken finds what it means, where to look and what to do."""
    text = (ROOT / "deploy" / "runbooks.md").read_text("utf-8")
    pages = dict(re.findall(r"^## (\S+)\n(.*?)(?=^#|\Z)", text, re.MULTILINE | re.DOTALL))
    for rule in rules():
        path, _, anchor = rule["annotations"]["runbook"].partition("#")
        assert path == "deploy/runbooks.md"
        assert anchor == rule["alert"].lower()
        page = pages[rule["alert"]]
        assert [word for word in ("**Means**", "**Look**", "**Do**") if word not in page] == []
        assert rule["labels"]["severity"] in {"page", "ticket"}


def test_every_panel_has_its_unit_and_its_place() -> None:
    """A number without a unit is read as another one; two panels in one place hide each other."""
    taken = set[tuple[int, int]]()
    for panel in panels():
        assert panel["fieldConfig"]["defaults"]["unit"]
        place = panel["gridPos"]
        cells = {
            (x, y)
            for x in range(place["x"], place["x"] + place["w"])
            for y in range(place["y"], place["y"] + place["h"])
        }
        assert not cells & taken, panel["title"]
        taken |= cells
