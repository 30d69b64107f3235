"""Orders of rehearsals that several tests play, on one scale of a milliard nanos."""

from __future__ import annotations

from typing import Any

from service.configuring import filled

SCALE = 10**9
PLENTY = 10**15


def config(method: str = "kl-ucbid", **changes: Any) -> dict[str, Any]:
    """A line item's internal configuration: cap and ceiling are one scale."""
    built: dict[str, Any] = {
        "id": "rehearsed",
        "name": "Rehearsed",
        "currency": "EUR",
        "budget": PLENTY,
        "daily_budget": None,
        "bid_cap": SCALE,
        "auction": "second",
        "flight": {"starts_ms": 0, "ends_ms": None, "time_zone": "UTC"},
        "spend_on": "won",
        "grace_ms": 900_000,
        "billing_grace_ms": 86_400_000,
        "strict": False,
        "losses": "priced",
        "value": {"ceiling": SCALE, "arrival": "accrues", "window_ms": 604_800_000},
        "policy": {"method": method},
    }
    built["value"] = {**built["value"], **changes.pop("value", {})}
    if method == "flat":
        built["policy"] = {"method": "flat", "price": SCALE // 2}
    return filled({**built, **changes})[0]


def market(**changes: Any) -> dict[str, Any]:
    """Prices uniform, values of one scale on three impressions in ten."""
    return {
        "kind": "iid",
        "auction": "second",
        "rivals": {"law": "uniform", "low": 0, "high": SCALE},
        "values": {"law": "events", "chance": 0.3, "amount": SCALE},
        "floor": 0,
        "span_ms": 86_400_000,
        "value_delay_mean_ms": 0,
        "outcome_delay_ms": 0,
        "lost_share": 0.0,
        "change": 0.25,
        "gap": 0.05,
        **changes,
    }


def order(*configs: dict[str, Any], **changes: Any) -> dict[str, Any]:
    """An order over these policies, named by their methods."""
    policies = [{"name": one["policy"]["method"], "config": one} for one in configs]
    sizes = {"rounds": 400, "seeds": 2, "seed": 1, "block": 10}
    return {"policies": policies, "market": market(), **sizes, **changes}
