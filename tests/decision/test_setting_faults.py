"""Settings that make no sense: each is refused by a code and a sentence that names the field."""

from __future__ import annotations

from typing import Any

import pytest

from service.decision.methods import METHODS
from service.decision.setting_faults import (
    BAD_SETTING,
    LAW_CAP_MIN,
    PRIOR_CONVERSIONS_MAX,
    setting_fault,
)
from tests.decision.invented import CAP, CEILING, config


def changed(base: dict[str, Any], **changes: Any) -> dict[str, Any]:
    """A configuration with members changed; those of value and policy are merged."""
    built = {**base, "value": {**base["value"]}, "policy": {**base["policy"]}}
    for name, change in changes.items():
        merged = name in ("value", "policy")
        built[name] = {**built[name], **change} if merged else change
    return built


@pytest.mark.parametrize("method", sorted(METHODS))
def test_every_method_with_its_defaults_has_no_fault(method: str) -> None:
    """Or nobody could begin with it."""
    assert setting_fault(config(method)) is None


def test_a_method_that_is_none_is_answered_with_all_there_are() -> None:
    """In order, so that one can be picked."""
    fault = setting_fault(changed(config("mean"), policy={"method": "guess"}))
    assert fault is not None
    assert fault.code == BAD_SETTING
    assert ", ".join(sorted(METHODS)) in fault.detail


@pytest.mark.parametrize(
    ("method", "changes", "words"),
    [
        ("mean", {"value": {"typical": 0}}, "value.typical must be above 0"),
        ("mean", {"value": {"typical": CEILING + 1}}, "value.typical must be above 0"),
        (
            "mean",
            {"value": {"expected": {"per_impression": 0, "conversions": 1}}},
            "value.expected.per_impression must be above 0",
        ),
        (
            "mean",
            {"value": {"expected": {"per_impression": CEILING + 1, "conversions": 1}}},
            "value.expected.per_impression must be above 0",
        ),
        (
            "mean",
            {"value": {"expected": {"per_impression": 1, "conversions": -1}}},
            "value.expected.conversions must lie between 0 and 1,000,000",
        ),
        (
            "mean",
            {"value": {"expected": {"per_impression": 1, "conversions": 10**6 + 1}}},
            "value.expected.conversions must lie between 0 and 1,000,000",
        ),
        (
            "posterior-quantile",
            {"value": {"expected": {"per_impression": 1, "conversions": 0}}},
            "value.expected.conversions must be above 0 for posterior-quantile",
        ),
        ("mean", {"policy": {"warmth": 1}}, "policy holds a setting that mean does not take"),
        ("flat", {"policy": {"price": CAP + 1}}, "policy.price lies above the bid cap"),
        ("exptree", {"losses": "bare"}, 'say losses: "priced"'),
        ("exptree", {"losses": None}, "exptree-win-only"),
        ("exptree", {"auction": "first"}, "offered for no other"),
        ("exptree-win-only", {"auction": "fixed"}, "offered for no other"),
        ("exptree", {"bid_cap": LAW_CAP_MIN - 1}, "at least 0.000002 CPM"),
        ("exptree", {"value": {"ceiling": 20 * CAP + 1}}, "more than 20 bid caps"),
        ("exptree", {"value": {"drift": {"how": "window"}}}, "leave drift and change out"),
        ("exptree", {"value": {"change": {"action": "flag"}}}, "leave drift and change out"),
        ("linear", {"value": {"ceiling": 20 * CAP + 1}}, "the ellipsoid of linear"),
        ("linear", {"value": {"drift": {"how": "window"}}}, "linear forgets nothing"),
        ("linear", {"value": {"change": {"action": "restart"}}}, "all but the flag"),
        ("flat", {"value": {"hints": True}}, "value.hints has nothing to calibrate"),
        ("exptree", {"value": {"hints": True}}, "value.hints has nothing to calibrate"),
        (
            "mean",
            {"value": {"hints": True, "drift": {"how": "window"}}},
            "value.hints forgets nothing",
        ),
        ("exptree", {"pacing": {"method": "dual"}}, "which pacing would move"),
        ("flat", {"return_target": {"value_per_unit": 1}}, "needs an estimate of the value"),
        ("exptree", {"return_target": {"value_per_unit": 1}}, "needs an estimate of the value"),
    ],
)
def test_a_fault_is_told_in_a_sentence(method: str, changes: dict[str, Any], words: str) -> None:
    """With the field and what would do instead; the code is always the same."""
    fault = setting_fault(changed(config(method), **changes))
    assert fault is not None
    assert fault.code == BAD_SETTING
    assert words in fault.detail
    assert fault.detail.endswith(".")


@pytest.mark.parametrize(
    ("method", "changes"),
    [
        ("mean", {"value": {"typical": CEILING}}),
        ("mean", {"value": {"typical": 1}}),
        ("mean", {"value": {"expected": {"per_impression": CEILING, "conversions": 0}}}),
        (
            "mean",
            {"value": {"expected": {"per_impression": 1, "conversions": PRIOR_CONVERSIONS_MAX}}},
        ),
        (
            "posterior-quantile",
            {"value": {"expected": {"per_impression": 1, "conversions": 1e-6}}},
        ),
        ("flat", {"policy": {"price": CAP}}),
        ("exptree", {"value": {"ceiling": 20 * CAP}}),
        ("exptree-win-only", {"losses": "bare"}),
        ("linear", {"value": {"ceiling": 20 * CAP}}),
        ("linear", {"value": {"change": {"action": "flag"}}}),
        ("mean", {"value": {"hints": True, "change": {"action": "flag"}}}),
        ("mean", {"value": {"drift": {"how": "window", "rounds": 10}}}),
        ("flat", {"pacing": {"method": "dual"}}),
        ("mean", {"return_target": {"value_per_unit": 1}}),
    ],
)
def test_the_edge_itself_is_allowed(method: str, changes: dict[str, Any]) -> None:
    """One step before each refusal."""
    assert setting_fault(changed(config(method), **changes)) is None


@pytest.mark.parametrize("method", sorted(name for name, one in METHODS.items() if one.settings))
def test_a_setting_that_is_missing_is_named(method: str) -> None:
    """By the path a person wrote, or should have."""
    base = config(method)
    for name in METHODS[method].settings:
        left = {key: one for key, one in base["policy"].items() if key != name}
        fault = setting_fault({**base, "policy": left})
        assert fault is not None
        assert fault.detail == f"policy.{name} is needed by {method}."


@pytest.mark.parametrize("given", [True, "1", None, float("nan"), float("inf"), [1]])
@pytest.mark.parametrize("method", sorted(name for name, one in METHODS.items() if one.settings))
def test_a_setting_that_is_no_number_is_refused(method: str, given: object) -> None:
    """Whichever of them it is, and whatever stands there instead."""
    base = config(method)
    for name in METHODS[method].settings:
        fault = setting_fault(changed(base, policy={name: given}))
        assert fault is not None
        assert fault.detail.startswith(f"policy.{name} must be ")
