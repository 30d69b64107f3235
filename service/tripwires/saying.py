"""What a rule that fired says, and the words for shares, money and chances; apart from rules."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from service.money import nanos_text


@dataclass(frozen=True, slots=True)
class Saw:
    """
    What one rule saw.

    Args:
        sentence: What, with units.
        numbers: The same for programs; money in nanos under names that end in `_nanos`.
        since_ms: From when on.
    """

    sentence: str
    numbers: Mapping[str, Any]
    since_ms: int


@dataclass(frozen=True, slots=True)
class Finding:
    """A rule that fired, and what is to be done about it: "freeze" or "warn"."""

    rule: str
    action: str
    saw: Saw
    window_ms: int = 0


def share(part: float) -> str:
    """A share in percent, with a decimal where it is small."""
    return f"{100 * part:.0f} %" if part == 0 or part >= 0.1 else f"{100 * part:.2g} %"


def duration(milliseconds: int) -> str:
    """A length of time in the largest unit that says it whole."""
    for unit, size in (("days", 86_400_000), ("hours", 3_600_000), ("minutes", 60_000)):
        if milliseconds >= 2 * size and milliseconds % size == 0:
            return f"{milliseconds // size} {unit}"
    return f"{milliseconds / 1000:g} seconds"


def amount(nanos: float, currency: str) -> str:
    """An amount of money, cut to six decimals unless nothing would be left of it."""
    # A few nanos are said to the last one, or a finding would speak of nothing.
    step = 1000 if abs(nanos) >= 1000 else 1
    return f"{nanos_text(round(nanos / step) * step)} {currency}"


def chance(tail: float) -> str:
    """How unlikely it is, in words."""
    # Below this a tail is the rounding of floats, and digits would promise too much.
    return f"1 in {1 / tail:,.0f}" if tail > 1e-12 else "less than 1 in 10^12"
