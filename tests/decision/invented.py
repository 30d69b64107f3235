"""An invented line item for the tests of this folder, small enough to read at a glance."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from service.decision.learnability import defaults
from service.decision.terms import Terms

CAP = 8_000_000  # 8 CPM
CEILING = 100_000_000  # 0.10, twelve and a half caps
EUR = 10**9
SETTINGS = {"flat": {"price": 3_000_000}}


def partial(method: str | None = None, **policy: float) -> dict[str, Any]:
    """A configuration as a person would give it, with every default still missing."""
    given = SETTINGS.get(method or "", {})
    return {
        "currency": "EUR",
        "budget": 500 * EUR,
        "bid_cap": CAP,
        "auction": "second",
        "spend_on": "won",
        "losses": "priced",
        "value": {"ceiling": CEILING, "arrival": "once", "window_ms": 604_800_000},
        "policy": {"method": method, **given, **policy},
    }


def config(method: str | None = None, **policy: float) -> dict[str, Any]:
    """The same with defaults filled in."""
    return defaults(partial(method, **policy))[0]


def with_value(base: Mapping[str, Any], **value: Any) -> dict[str, Any]:
    """The same line item with other facts about its value; defaults filled in anew."""
    return defaults({**base, "value": {**base["value"], **value}})[0]


def terms(method: str, **policy: float) -> Terms:
    """Terms of the line item under one method."""
    return Terms.from_config(config(method, **policy))
