"""Line items are read in our units, and what is wrong with them is named and never quoted."""

from __future__ import annotations

from decimal import Decimal
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.api.forms.configs import defaults_taken, read_changes, read_new
from service.api.times import milliseconds
from service.configuring import merged
from service.errors import Malformed, Refusal
from tests.api.anything import ANYTHING

TODAY_MS = 1_767_225_600_000
SMALLEST: dict[str, Any] = {
    "id": "alpine-season-pass",
    "name": "Season pass, alpine garden",
    "currency": "EUR",
    "budget": "500.00",
    "bid_cap_cpm": Decimal("8.0"),
}


def test_the_smallest_line_item_takes_the_documented_defaults() -> None:
    """Five fields are enough; the rest is filled in, named, or left to the story."""
    config, form = read_new(SMALLEST, TODAY_MS)
    assert config == {
        "id": "alpine-season-pass",
        "name": "Season pass, alpine garden",
        "currency": "EUR",
        "budget": 500 * 10**9,
        "daily_budget": None,
        "bid_cap": 8_000_000,
        "auction": "second",
        "flight": {"starts_ms": TODAY_MS, "ends_ms": None, "time_zone": "UTC"},
        "spend_on": "won",
        "grace_ms": 900_000,
        "billing_grace_ms": 86_400_000,
        "strict": False,
        "value": {
            "arrival": "accrues",
            "window_ms": 604_800_000,
            "delay_mean_ms": None,
            "drift": None,
            "change": None,
            "hints": False,
        },
        "pacing": {"profile": None},
        "return_target": None,
        "allowance": None,
        "control": None,
        "kin": None,
        "fees": None,
        "losses": "bare",
        "tripwires": None,
    }
    assert set(defaults_taken(form)) == {
        *("auction", "flight.starts_at", "flight.time_zone", "spend_on", "grace_s"),
        *("billing_grace_s", "strict", "value.arrival", "value.window_s"),
        *("losses", "value.hints"),
    }


def test_every_field_of_a_line_item_reaches_the_config() -> None:
    """What is given is kept, in nanos and milliseconds, and no default is reported for it."""
    members = {
        **SMALLEST,
        "daily_budget": 60,
        "flight": {
            "starts_at": "2026-12-01T01:00:00.250+01:00",
            "ends_at": "2026-12-31T00:00:00Z",
            "time_zone": "Europe/Zurich",
        },
        "value": {
            "ceiling": "50.00",
            "typical": "2.00",
            "arrival": "once",
            "window_s": 60,
            "delay_mean_s": 30,
            "expected": {"per_impression": "0.0020", "conversions": 2},
            "hints": False,
        },
        "policy": {"method": "flat", "price_cpm": "2"},
        "confirm": "learning_cost",
    }
    config, form = read_new(members, TODAY_MS)
    assert config["daily_budget"] == 60 * 10**9
    assert config["flight"]["starts_ms"] == milliseconds("2026-12-01T00:00:00.250Z")
    assert config["value"]["delay_mean_ms"] == 30_000
    assert config["value"]["expected"] == {"per_impression": 2_000_000, "conversions": 2}
    assert config["policy"] == {"method": "flat", "price": 2_000_000}
    assert form.confirm == "learning_cost"
    assert not [name for name in defaults_taken(form) if name.startswith(("flight", "value"))]


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"budget": "0.00"}, "budget"),
        ({"budget": "0.0000000001"}, "budget"),
        ({"bid_cap_cpm": "0.0000001"}, "bid_cap_cpm"),
        ({"budget": "0.007999999"}, "bid_cap_cpm"),
        ({"grace_s": 0}, "grace_s"),
        ({"grace_s": 30 * 86_400 + 1}, "grace_s"),
        ({"currency": "eur"}, "currency"),
        ({"flight": {"time_zone": "Europe/Nowhere"}}, "flight.time_zone"),
        ({"flight": {"time_zone": "/etc/passwd"}}, "flight.time_zone"),
        (
            {"flight": {"starts_at": "2026-12-01T00:00:00Z", "ends_at": "2026-12-01T00:00:00Z"}},
            "flight.ends_at",
        ),
        ({"value": {"ceiling": "1.00", "typical": "1.01"}}, "value.typical"),
        (
            {"value": {"ceiling": "1.00", "expected": {"per_impression": "1.01"}}},
            "value.expected.per_impression",
        ),
        ({"policy": {"method": "flat", "price_cpm": "8.000001"}}, "policy.price_cpm"),
        ({"policy": {"method": "flat", "price": 5}}, "policy"),
        ({"policy": {"gamma": 2}}, "policy"),
        ({"policy": {"method": "ucbid", "gamma": "2"}}, "policy"),
        ({"daily_buget": "1.00"}, ""),
        ({"value": {"cieling": "1.00"}}, "value"),
    ],
)
def test_a_bad_field_is_named_by_its_path(change: dict[str, Any], field: str) -> None:
    """The refusal says which field, and of an unknown one only where it stood."""
    with pytest.raises(Malformed) as caught:
        read_new({**SMALLEST, **change}, TODAY_MS)
    assert (caught.value.code, caught.value.data) == ("bad_field", {"field": field})


@pytest.mark.parametrize(
    ("control", "field"),
    [
        ({"share": 0.1}, "control.price_cpm"),
        ({"price_cpm": 2.0}, "control.share"),
        ({"share": 0, "price_cpm": 2.0}, "control.share"),
        ({"share": -0.1, "price_cpm": 2.0}, "control.share"),
        ({"share": 0.51, "price_cpm": 2.0}, "control.share"),
        ({"share": True, "price_cpm": 2.0}, "control.share"),
        ({"share": 0.1, "price_cpm": 0}, "control.price_cpm"),
        ({"share": 0.1, "price_cpm": 8.1}, "control.price_cpm"),
        ({"share": 0.1, "method": "kl-ucbid", "price_cpm": 2.0}, "control.method"),
        ({"share": 0.1, "price_cpm": 2.0, "shiny": 1}, "control"),
    ],
)
def test_a_control_share_that_makes_no_sense_is_refused(
    control: dict[str, Any], field: str
) -> None:
    """Above 0 and at most a half, a plain rule, a price within the cap."""
    with pytest.raises(Malformed) as caught:
        read_new({**SMALLEST, "control": _decimals(control)}, TODAY_MS)
    assert caught.value.data == {"field": field}


def _decimals(members: dict[str, Any]) -> dict[str, Any]:
    """Fractions as the edge reads them."""
    return {k: Decimal(str(v)) if isinstance(v, float) else v for k, v in members.items()}


def test_a_control_share_is_kept_in_parts_and_nanos() -> None:
    """As money is; a flat main method may be compared with another flat price, not its own."""
    control = {"share": Decimal("0.1"), "method": "flat", "price_cpm": 2}
    config, _ = read_new({**SMALLEST, "control": control}, TODAY_MS)
    assert config["control"] == {"share": 10**8, "method": "flat", "price": 2_000_000}
    read_new({**SMALLEST, "control": control, "policy": {"method": "flat", "price_cpm": 1}}, 0)
    with pytest.raises(Malformed, match="nothing differs"):
        read_new({**SMALLEST, "control": control, "policy": {"method": "flat", "price_cpm": 2}}, 0)


def test_wishes_left_empty_are_no_wishes() -> None:
    """Null, an empty object and an empty list ask for nothing."""
    unasked: dict[str, object] = {"return_target": None, "control": None, "fees": None}
    config, _ = read_new({**SMALLEST, **unasked, "kin": [], "tripwires": {}}, TODAY_MS)
    assert config == read_new(SMALLEST, TODAY_MS)[0] | {
        "kin": [],
        "tripwires": {"value_silence_ms": None},
    }


def test_a_change_holds_only_what_came() -> None:
    """A null clears what may be cleared; everything else stays out of the change."""
    changes, form = read_changes(
        {"daily_budget": None, "flight": {"ends_at": None}, "grace_s": 60, "reason": "A test."}
    )
    assert changes == {"daily_budget": None, "flight": {"ends_ms": None}, "grace_ms": 60_000}
    assert form.reason == "A test."


@pytest.mark.parametrize(
    ("members", "code"),
    [
        ({}, "bad_field"),
        ({"reason": "Nothing."}, "bad_field"),
        ({"name": None}, "bad_field"),
        ({"id": "alpine-season-pass"}, "fixed_at_creation"),
        ({"currency": "CHF"}, "fixed_at_creation"),
        ({"auction": "second"}, "fixed_at_creation"),
        ({"spend_on": "won"}, "fixed_at_creation"),
        ({"flight": {"time_zone": "UTC"}}, "fixed_at_creation"),
        ({"value": {"arrival": "once"}}, "fixed_at_creation"),
    ],
)
def test_what_cannot_change_is_refused(members: dict[str, Any], code: str) -> None:
    """An empty change, a null where none may stand and fixed fields are refused."""
    with pytest.raises(Malformed) as caught:
        read_changes(members)
    assert caught.value.code == code


def test_a_policy_is_replaced_and_other_objects_are_merged() -> None:
    """A new method does not inherit the settings of the old one."""
    config = {"policy": {"method": "flat", "price": 1}, "value": {"ceiling": 5, "typical": 2}}
    changes = {"policy": {"method": "mean"}, "value": {"typical": 3}}
    assert merged(config, changes) == {
        "policy": {"method": "mean"},
        "value": {"ceiling": 5, "typical": 3},
    }
    assert config["policy"] == {"method": "flat", "price": 1}


@given(st.dictionaries(st.sampled_from(list(SMALLEST)), ANYTHING, max_size=3))
def test_no_line_item_fails_otherwise_than_by_a_refusal(members: dict[str, object]) -> None:
    """Whatever replaces the five needed fields, the config holds whole nanos or there is none."""
    try:
        config, _ = read_new({**SMALLEST, **members}, TODAY_MS)
    except Refusal:
        return
    assert type(config["budget"]) is int
    assert 0 < config["bid_cap"] <= config["budget"]
