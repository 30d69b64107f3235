"""Settings that make no sense, apart from those that only cost money."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from service.decision.method import Method
from service.decision.methods import METHODS, NOT_OFFERED, settings_of

BAD_SETTING = "bad_setting"
METHOD_NOT_OFFERED = "not_offered"

PRIOR_CONVERSIONS_MAX = 10**6


@dataclass(frozen=True, slots=True)
class Objection:
    """Why a configuration is refused: a stable code and a sentence or two."""

    code: str
    detail: str


def setting_fault(config: Mapping[str, Any]) -> Objection | None:
    """The first fault of method, settings, typical value or guess; None when all is well."""
    policy, value = config["policy"], config["value"]
    name = policy["method"]
    if name in NOT_OFFERED:
        return Objection(METHOD_NOT_OFFERED, "This release does not offer that method.")
    if name not in METHODS:
        known = ", ".join(sorted(METHODS))
        return Objection(BAD_SETTING, f"policy.method must be one of: {known}.")
    sentence = _policy_fault(policy, config["bid_cap"]) or _value_fault(value, METHODS[name])
    return Objection(BAD_SETTING, sentence) if sentence else None


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
