"""A feed that goes wrong at night is found, stopped and undone, and nothing of it is left."""

from __future__ import annotations

import json

import pytest

from service.__main__ import main
from service.commands.drill_night import value_part
from service.learner.memory import Cell, Memory
from service.learner.tally import Tally

SHORT = ["--window-s", "2", "--json"]


def test_what_a_wrong_feed_taught_is_undone_byte_for_byte(
    capsys: pytest.CaptureFixture[str],
) -> None:
    """The tripwire fires and freezes; after retract, rewind and thaw the value parts are equal."""
    assert main(["drill", "night", *SHORT]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["faults"] == []
    assert len(set(found["digests"].values())) == 1
    (night, twin) = sorted(found["told"])
    # One was told more than the other, or nothing was tried.
    assert found["told"][night]["wins"] > found["told"][twin]["wins"] > 100
    said = " ".join(what for _, what in found["moments"])
    for word in ("preview", "retracted", "rewound", "thawed", "by tripwire"):
        assert word in said


@pytest.mark.long
@pytest.mark.parametrize("more", [[], ["--postgresql"], ["--postgresql", "--only-warn"]])
def test_the_long_night(capsys: pytest.CaptureFixture[str], more: list[str]) -> None:
    """On both databases, frozen by the tripwire or by a person."""
    assert main(["drill", "night", *more, "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["faults"] == []


def test_the_part_that_is_compared_is_all_that_values_taught() -> None:
    """A value more, or an impression more, is seen; a round more and a later clock are not."""
    one = Memory(base=Tally(wins=5), cells=(Cell(7, 9, 2, 2, 1, 50, 2500),), clock_ms=3)
    same = Memory(base=Tally(rounds=8), cells=(Cell(7, 8, 2, 2, 1, 50, 2500),), clock_ms=9)
    assert value_part(one.to_bytes()) == value_part(same.to_bytes())
    for other in (
        Memory(cells=(Cell(7, 9, 3, 2, 1, 50, 2500),)),
        Memory(cells=(Cell(7, 9, 2, 2, 1, 51, 2601),)),
        Memory(cells=(Cell(8, 9, 2, 2, 1, 50, 2500),)),
        Memory(cells=one.cells, delays=1),
    ):
        assert value_part(one.to_bytes()) != value_part(other.to_bytes())
