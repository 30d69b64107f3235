"""Even traffic leaves memory, descriptors and the log of SQLite as they are."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main
from service.commands.drill_soak import Look, judge


def test_memory_descriptors_and_log_stay_flat(capsys: pytest.CaptureFixture[str]) -> None:
    """Twenty seconds; the long form takes ten minutes and holds memory to a twentieth."""
    code = main(["drill", "soak", "--minutes", "0.34", "--rate", "80", "--json"])
    figures = json.loads(capsys.readouterr().out)
    # In twenty seconds caches and arenas are still filling, so memory alone has a wider limit.
    assert [fault for fault in figures["faults"] if "memory" not in fault] == []
    assert figures["memory_last"] - figures["memory_first"] < 16
    assert code == (3 if figures["faults"] else 0)
    assert figures["calls"]["bid ok"] > 500
    assert figures["memory_last"] > 20
    assert figures["descriptors_last"] > 5
    assert 0 < figures["wal_max"] < 64


@pytest.mark.parametrize(
    ("last", "fault"),
    [
        (Look(104, 30, 4), None),
        (Look(109, 30, 4), "memory grew"),
        (Look(100, 60, 4), "descriptors grew"),
        (Look(100, 30, 70), "log of SQLite"),
    ],
)
def test_growth_is_a_fault(last: Look, fault: str | None) -> None:
    """Measured from the end of the warm-up; each kind has its own limit."""
    looks = [Look(60, 10, 0)] * 5 + [Look(100, 30, 4)] * 10 + [last] * 5
    found = judge(1, {}, looks, []).faults
    assert found == [] if fault is None else fault in found[0]


def test_what_the_exchange_found_is_a_fault_too() -> None:
    """A broken promise is one, however flat the memory."""
    assert judge(1, {}, [Look(100, 30, 4)] * 8, ["V1: too much"]).faults == ["V1: too much"]
