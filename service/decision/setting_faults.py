"""Settings that make no sense, apart from those that only cost money."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from service.decision.method import Method
from service.decision.methods import METHODS, settings_of
from service.decision.spending import spending_fault
from service.learner.rules import RARE_FROM

BAD_SETTING = "bad_setting"

PRIOR_CONVERSIONS_MAX = 10**6
LAW_CAP_MIN = 2  # Nanos per impression; below it there is no price to draw.


@dataclass(frozen=True, slots=True)
class Objection:
    """Why a configuration is refused: a stable code and a sentence or two."""

    code: str
    detail: str


def setting_fault(config: Mapping[str, Any]) -> Objection | None:
    """The first fault of method, settings, typical value or guess; None when all is well."""
    policy, value = config["policy"], config["value"]
    name = policy["method"]
    if name not in METHODS:
        known = ", ".join(sorted(METHODS))
        return Objection(BAD_SETTING, f"policy.method must be one of: {known}.")
    sentence = (
        _feedback_fault(config, METHODS[name])
        or _said_fault(config, METHODS[name])
        or _policy_fault(policy, config["bid_cap"])
        or _value_fault(value, METHODS[name])
        or spending_fault(config, METHODS[name])
    )
    return Objection(BAD_SETTING, sentence) if sentence else None


def _feedback_fault(config: Mapping[str, Any], method: Method) -> str | None:
    """Why the line item's own outcomes cannot teach the method, if they cannot."""
    if method.needs_priced_losses and config.get("losses", "bare") != "priced":
        return (
            f"{method.name} learns from the competing bid of every loss. Where the exchange "
            'tells it as to_win_cpm, say losses: "priced"; else take exptree-win-only.'
        )
    if method.by_law and config["auction"] != "second":
        return f"{method.name} draws its bids for a second price; it is offered for no other."
    if method.by_law and config["bid_cap"] < LAW_CAP_MIN:
        return f"{method.name} needs a bid cap of at least 0.000002 CPM, or it has no choice."
    if method.by_law and config["value"]["ceiling"] > RARE_FROM * config["bid_cap"]:
        return (
            f"With a ceiling of more than {RARE_FROM} bid caps, what {method.name} guarantees "
            "is more than can be lost."
        )
    if method.by_law and (config["value"].get("drift") or config["value"].get("change")):
        return f"{method.name} forgets nothing and restarts by itself; leave drift and change out."
    return None


def _said_fault(config: Mapping[str, Any], method: Method) -> str | None:
    """Why what is said of single opportunities cannot serve this line item, if it cannot."""
    value, hints = config["value"], bool(config["value"].get("hints"))
    restarts = (value.get("change") or {}).get("action") == "restart"
    if method.by_features and value["ceiling"] > RARE_FROM * config["bid_cap"]:
        return (
            f"With a ceiling of more than {RARE_FROM} bid caps, the ellipsoid of {method.name} "
            "then says nothing: it is wider than the cap for as long as any budget lasts."
        )
    if hints and (not method.learns or method.by_law):
        return f"{method.name} takes no account of values, so value.hints has nothing to calibrate."
    if (hints or method.by_features) and (value.get("drift") or restarts):
        what = "value.hints" if hints else method.name
        return f"{what} forgets nothing; leave drift out, and of change all but the flag."
    return None


def _policy_fault(policy: Mapping[str, Any], cap: int) -> str | None:
    settings = settings_of(policy["method"])
    if not set(policy) <= {"method", *settings}:
        return f"policy holds a setting that {policy['method']} does not take."
    for name, setting in settings.items():
        if name not in policy:
            return f"policy.{name} is needed by {policy['method']}."
        fault: str | None = setting.fault(f"policy.{name}", policy[name])
        if fault is not None:
            return fault
    return "policy.price lies above the bid cap." if policy.get("price", 0) > cap else None


def _value_fault(value: Mapping[str, Any], method: Method) -> str | None:
    ceiling, expected = value["ceiling"], value["expected"]
    if not 0 < value["typical"] <= ceiling:
        return "value.typical must be above 0 and not above value.ceiling."
    if not 0 < expected["per_impression"] <= ceiling:
        return "value.expected.per_impression must be above 0 and not above value.ceiling."
    conversions = expected["conversions"]
    if not 0 <= conversions <= PRIOR_CONVERSIONS_MAX:
        return f"value.expected.conversions must lie between 0 and {PRIOR_CONVERSIONS_MAX:,}."
    if conversions == 0 and method.needs_prior:
        return f"value.expected.conversions must be above 0 for {method.name}."
    return None
