"""Which ways to spread or bind spend suit which methods, asked only when a line item changes."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from service.decision.method import Method
from service.decision.methods import METHODS

NONE, DUAL = "none", "dual"


def usual_pacing(config: Mapping[str, Any]) -> str:
    """
    The pacing of a line item that names none: dual where there is a rate to hold to.

    That is a daily budget, or a flight that ends. A flat price is an order, and the bids of a
    law teach by their odds: neither is moved unless somebody asks.
    """
    ends = (config.get("flight") or {}).get("ends_ms")
    method = METHODS.get(config["policy"]["method"])
    # An unknown method is refused elsewhere, with a sentence; here it is only not paced.
    moved = method is not None and method.learns and not method.by_law
    return DUAL if moved and (config.get("daily_budget") or ends) else NONE


def spending_fault(config: Mapping[str, Any], method: Method) -> str | None:
    """Why a method cannot be paced or held to a return target, if it cannot."""
    paced = (config.get("pacing") or {}).get("method", NONE) != NONE
    if method.by_law and paced:
        return f"{method.name} learns by the odds of its own bids, which pacing would move."
    if config.get("return_target") and (method.by_law or not method.learns):
        return f"A return target needs an estimate of the value, and {method.name} has none."
    return None
