"""The black-box drill in its short form: everything is killed, nothing acknowledged is lost."""

from __future__ import annotations

import json
from typing import Any

import pytest

from service.__main__ import main
from service.commands.drill_kill import GRACE_S

POSTGRESQL = ["--database", "postgresql", "--workers", "3", "--kills", "12", "--seconds", "24"]
SQLITE = ["--database", "sqlite", "--kills", "6", "--seconds", "12"]


def drilled(capsys: pytest.CaptureFixture[str], words: list[str]) -> tuple[int, dict[str, Any]]:
    """The exit code and the figures of one drill."""
    code = main(["drill", "kill", "--json", *words])
    return code, json.loads(capsys.readouterr().out)


@pytest.mark.parametrize(
    ("words", "kills", "restarts", "workers"), [(POSTGRESQL, 12, 1, 3), (SQLITE, 6, 0, 1)]
)
def test_no_kill_breaks_a_promise(
    capsys: pytest.CaptureFixture[str], words: list[str], kills: int, restarts: int, workers: int
) -> None:
    """Kills, stops, cuts and restarts; afterwards both sides' books agree to the nano."""
    code, figures = drilled(capsys, words)
    assert figures["violations"] == []
    assert code == 0
    assert figures["workers"] == workers
    assert figures["faults"]["kill"] >= kills
    assert figures["faults"].get("restart", 0) >= restarts
    assert figures["acknowledged"] > 100
    assert figures["reads"] > 50
    assert figures["calls"]["outcome unknown"] > 0
    # On a machine so busy that news took longer than grace, late cost may lack its money.
    assert figures["unfunded"] == "0.00" or figures["delay_s_max"] >= GRACE_S
    # Not the aim, which is seconds, but what tells a busy machine from one that never recovers.
    assert figures["recovery_s_max"] < 60
    assert figures["held_end"] == "0.00"
