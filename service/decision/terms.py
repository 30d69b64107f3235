"""What of a line item's configuration a price depends on, read once per change."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, slots=True)
class Terms:
    """
    The fixed side of a price; money in nanos, prices per impression.

    Args:
        currency: Code of the currency, for words only.
        auction: Kind of auction; names the bidding rule.
        cap: Largest price that may leave.
        ceiling: Largest value of one event.
        typical: Usual value of one event.
        expected: A guess of the value of an impression, before anything is known.
        prior_conversions: How many conversions that guess weighs.
        arrival: "once" or "accrues".
        method: Name of the method.
        settings: The method's own settings.
    """

    currency: str
    auction: str
    cap: int
    ceiling: int
    typical: int
    expected: int
    prior_conversions: float
    arrival: str
    method: str
    settings: Mapping[str, float]

    @property
    def scale(self) -> float:
        """What values are divided by inside an index, and only there."""
        return float(self.ceiling)

    @property
    def prior_impressions(self) -> float:
        """How many impressions the guess weighs: its conversions at the guessed rate."""
        return self.prior_conversions * self.typical / self.expected

    @staticmethod
    def from_config(config: Mapping[str, Any]) -> Terms:
        """Read a line item's internal configuration, defaults already filled in."""
        value, policy = config["value"], config["policy"]
        return Terms(
            currency=config["currency"],
            auction=config["auction"],
            cap=config["bid_cap"],
            ceiling=value["ceiling"],
            typical=value["typical"],
            expected=value["expected"]["per_impression"],
            prior_conversions=float(value["expected"]["conversions"]),
            arrival=value["arrival"],
            method=policy["method"],
            settings={name: policy[name] for name in policy if name != "method"},
        )
