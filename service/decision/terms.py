"""What of a line item's configuration a price depends on, read once per change."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from service.learner import exptree_rules, return_target
from service.learner.memory import Prior
from service.learner.rules import Drift, drift_of, is_paced, return_rules, tree_rules

WINDOW_MS = 604_800_000


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
        window_ms: How long values are waited for.
        delay_mean_ms: Mean delay of values where it is known, else None.
        drift: How the old is forgotten, if it is.
        on_change: What a change detector does on an alarm; None where there is none.
        allowance: How much may be lost to learning; None for no limit.
        tree: The game of the tree of exponential weights, where the method grows one.
        hints: Whether the caller's own predictions are bid by.
        paced: Whether a multiplier holds spend to a rate.
        returning: The return target; None for none.
        strict_return: Whether it may not be missed on the way.
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
    window_ms: int = WINDOW_MS
    delay_mean_ms: int | None = None
    drift: Drift | None = None
    on_change: str | None = None
    allowance: int | None = None
    tree: exptree_rules.Rules | None = None
    hints: bool = False
    paced: bool = False
    returning: return_target.Rules | None = None
    strict_return: bool = False

    @property
    def scale(self) -> float:
        """What values are divided by inside an index, and only there."""
        return float(self.ceiling)

    @property
    def prior_impressions(self) -> float:
        """How many impressions the guess weighs: its conversions at the guessed rate."""
        return self.prior_conversions * self.typical / self.expected

    def guided(self, prior: Prior | None) -> Terms:
        """The terms under a guess that a lesson brought; the same without one."""
        if prior is None:
            return self
        # The ceiling may have been lowered since the lesson.
        typical, expected = (min(n, self.ceiling) for n in (prior.typical, prior.per_impression))
        return replace(self, typical=typical, expected=expected)

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
            window_ms=value.get("window_ms", WINDOW_MS),
            delay_mean_ms=value.get("delay_mean_ms"),
            drift=drift_of(value.get("drift")),
            on_change=(value.get("change") or {}).get("action"),
            allowance=config.get("allowance"),
            tree=tree_rules(config),
            hints=bool(value.get("hints")),
            paced=is_paced(config),
            returning=return_rules(config),
            strict_return=bool((config.get("return_target") or {}).get("strict")),
        )
