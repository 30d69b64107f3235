"""Which rules there are, what they do and from when on, with defaults; apart from how they judge.

The thresholds are our own, chosen so that a quiet line item is left alone for years: each look
at a window raises a false alarm with a chance of at most `alpha` (common practice, no source).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

FREEZE, WARN, OFF = "freeze", "warn", "off"
MINUTE_MS, HOUR_MS, DAY_MS = 60_000, 3_600_000, 86_400_000
ALPHA = 1e-6


@dataclass(frozen=True, slots=True)
class Setup:
    """
    How one rule is set; None where the rule has no such threshold.

    Args:
        action: "freeze", "warn" or "off".
        window_ms: The stretch of time that is judged.
        count_min: Fewer bids, outcomes or values than this say nothing.
        ratio: By what factor it must be off, however sure the difference is.
        alpha: How unlikely it must be on the line item's own history.
        share_min: A share below this is nothing to wake anybody for.
    """

    action: str
    window_ms: int | None = None
    count_min: int | None = None
    ratio: float | None = None
    alpha: float | None = None
    share_min: float | None = None


DEFAULTS: dict[str, Setup] = {
    "no_outcomes": Setup(FREEZE, 15 * MINUTE_MS, 50, alpha=ALPHA),
    "win_rate": Setup(WARN, HOUR_MS, 50, 2.0, ALPHA),
    "clearing_price": Setup(WARN, HOUR_MS, 20, 2.0),
    "spend_speed": Setup(WARN, HOUR_MS, 20, 3.0),
    "value_count": Setup(WARN, DAY_MS, 5, 2.0, ALPHA),
    "value_size": Setup(FREEZE, HOUR_MS, 5, 2.0, ALPHA),
    "zero_values": Setup(FREEZE, HOUR_MS, 3, 2.0, ALPHA),
    "unknown_values": Setup(WARN, DAY_MS, 50, 2.0, ALPHA),
    "silent_bids": Setup(WARN, HOUR_MS, 50, 2.0, ALPHA, 0.2),
    "voids": Setup(WARN, HOUR_MS, 50, 2.0, ALPHA, 0.1),
    "late_outcomes": Setup(WARN, HOUR_MS, 50, 2.0, ALPHA, 0.05),
    "refused_outcomes": Setup(WARN, HOUR_MS, 20, 2.0, ALPHA, 0.05),
    # The booking of such a cost freezes by itself; the rule says so and keeps saying so.
    "unfunded": Setup(WARN),
    "disputed": Setup(WARN),
    "learner_halted": Setup(WARN, MINUTE_MS),
}


def setups_of(config: Mapping[str, Any]) -> dict[str, Setup]:
    """Every rule as a line item's configuration sets it; what it does not say is the default."""
    said = config.get("tripwires") or {}
    return {name: replace(default, **(said.get(name) or {})) for name, default in DEFAULTS.items()}


def thresholds(setup: Setup) -> dict[str, Any]:
    """A setup as people read it: only what the rule has."""
    named = {name: getattr(setup, name) for name in Setup.__slots__}
    return {name: value for name, value in named.items() if value is not None}
