"""What a bench has measured, in one form, so that a program reads every bench alike."""

from __future__ import annotations

import json
import statistics
import sys
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

from rich.console import Console

from service.commands import report

WIDTH = 140


@dataclass(frozen=True, slots=True)
class Figure:
    """
    One figure with its unit.

    Args:
        spread: The least and the most of several rounds, where there were several.
        aim: What it is held against; None where it only says how things are.
        at_least: Whether the aim is a floor; else it is a ceiling.
    """

    name: str
    figure: float
    unit: str
    spread: tuple[float, float] | None = None
    aim: float | None = None
    at_least: bool = False

    @property
    def reached(self) -> bool | None:
        """Whether the aim was reached; None without an aim."""
        if self.aim is None:
            return None
        return self.figure >= self.aim if self.at_least else self.figure <= self.aim


def of_rounds(
    name: str,
    unit: str,
    rounds: Sequence[float],
    aim: float | None = None,
    *,
    at_least: bool = False,
) -> Figure:
    """The median of several rounds, with their spread."""
    spread = (min(rounds), max(rounds)) if len(rounds) > 1 else None
    return Figure(name, statistics.median(rounds), unit, spread, aim, at_least)


def all_reached(found: Iterable[Figure]) -> bool:
    """Whether no aim was missed."""
    return all(one.reached is not False for one in found)


def as_data(found: Iterable[Figure]) -> list[dict[str, Any]]:
    """For a program: a list of objects with the same six members each."""
    return [
        {
            "name": one.name,
            "figure": one.figure,
            "unit": one.unit,
            "spread": None if one.spread is None else list(one.spread),
            "aim": one.aim,
            "reached": one.reached,
        }
        for one in found
    ]


def write(found: Iterable[Figure]) -> None:
    """Write them for a program."""
    sys.stdout.write(json.dumps(as_data(found)) + "\n")


def show(title: str, found: Iterable[Figure], *notes: str) -> None:
    """Write them for a person, one line each, and what has to be said beside them."""
    console = Console(width=WIDTH)
    heads = ["figure", "from, to", "aim", "reached"]
    console.print(report.table(title, heads, {one.name: _cells(one) for one in found}))
    for note in notes:
        console.print(note, highlight=False)


def number(figure: float) -> str:
    """As many digits as say something: none behind the point of thousands, two of a ratio."""
    return f"{figure:,.0f}" if abs(figure) >= 1000 else f"{figure:,.2f}"


def _cells(one: Figure) -> tuple[str, ...]:
    aim = "" if one.aim is None else f"at {'least' if one.at_least else 'most'} {one.aim:g}"
    return (
        f"{number(one.figure)} {one.unit}".rstrip(),
        "" if one.spread is None else " to ".join(number(end) for end in one.spread),
        aim,
        {None: "", True: "yes", False: "no"}[one.reached],
    )
