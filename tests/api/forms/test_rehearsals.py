"""The form of a rehearsal: what it becomes, its bounds, and what it refuses."""

from __future__ import annotations

from decimal import Decimal
from typing import Any

import pytest

from service.api.forms.rehearsals import read_rehearsal
from service.errors import Malformed
from service.rehearsal_orders import order_of

CONFIG: dict[str, Any] = {
    **{"id": "a", "name": "A", "currency": "EUR", "budget": "5.00", "bid_cap_cpm": 8},
    "value": {"ceiling": "0.10", "typical": "0.02"},
}
BODY: dict[str, Any] = {
    "config": CONFIG,
    "policies": [{"name": "now"}, {"name": "dear", "change": {"bid_cap_cpm": 12}}],
    "market": {"kind": "iid"},
}


def body(**changes: Any) -> dict[str, Any]:
    """The small body, with a market of its own where one is named."""
    return {**BODY, **changes}


def test_defaults_make_a_rehearsal_of_two_policies() -> None:
    """Differences are applied to the line item; the market follows from the first policy."""
    order = order_of(read_rehearsal(body(), 0), read_rehearsal(body(), 0)["config"])
    now, dear = (policy["config"] for policy in order["policies"])
    assert (now["bid_cap"], dear["bid_cap"]) == (8_000_000, 12_000_000)
    assert {**dear, "bid_cap": 8_000_000} == now
    assert (order["rounds"], order["seeds"], order["block"]) == (10_000, 20, 50)
    assert order["market"]["rivals"] == {"law": "uniform", "low": 0, "high": 8_000_000}
    # The guess of half a cap, in conversions of 0.02.
    values = order["market"]["values"]
    assert (values["amount"], values["chance"]) == (20_000_000, pytest.approx(0.2))


def test_laws_are_read_in_our_units() -> None:
    """CPM becomes nanos per impression, amounts nanos, seconds milliseconds."""
    rivals = {"law": "lognormal", "median_cpm": 3, "sigma": Decimal("0.8")}
    values = {"law": "baskets", "chance": Decimal("0.001"), "mean": "2", "ceiling": "50"}
    said = {"kind": "abrupt", "span_s": 600, "value_delay_mean_s": 60, "rivals": rivals}
    market = read_rehearsal(body(market=said, rounds=100), 0)["market"]
    assert market["rivals"] == {"law": "lognormal", "low": 0, "median": 3_000_000, "sigma": 0.8}
    assert (market["span_ms"], market["value_delay_mean_ms"]) == (600_000, 60_000)
    market = read_rehearsal(body(market={"kind": "iid", "values": values}), 0)["market"]
    assert market["values"]["ceiling"] == 50 * 10**9


@pytest.mark.parametrize(
    ("changes", "field"),
    [
        ({"rounds": 0}, "rounds"),
        ({"rounds": 1_000_001}, "rounds"),
        ({"rounds": 1_000_000, "seeds": 11}, "rounds"),
        ({"seeds": 0}, "seeds"),
        ({"policies": []}, "policies"),
        ({"policies": [{"name": "a"}, {"name": "a"}]}, "policies"),
        (
            {"policies": [{"name": "a", "change": {"currency": "USD"}}]},
            "currency",
        ),
        ({"policies": [{"name": "a", "surprise": 1}]}, "policies.0"),
        ({"line_item": "b"}, "line_item"),
        ({"config": None}, "line_item"),
        ({"market": {"kind": "nowhere"}}, "market.kind"),
        ({"market": {"kind": "own_curve"}}, "line_item"),
        ({"market": {"kind": "arena"}, "policies": [{"name": "a"}]}, "policies"),
        ({"market": {"kind": "iid", "span_s": 60}, "rounds": 20_000, "seeds": 1}, "market.span_s"),
        ({"market": {"kind": "iid", "rivals": {"law": "uniform"}}}, "market.rivals.high_cpm"),
        ({"market": {"kind": "iid", "values": {"law": "events"}}}, "market.values.chance"),
        (
            {"market": {"kind": "drift", "values": {"law": "even", "high": "1"}}},
            "market.values.law",
        ),
        (
            {"market": {"kind": "iid", "rivals": {"law": "uniform", "low_cpm": 9, "high_cpm": 8}}},
            "market.rivals.low_cpm",
        ),
        ({"market": {"kind": "iid", "outcomes_lost": 1}}, "market.outcomes_lost"),
    ],
)
def test_what_cannot_be_is_refused_by_its_field(changes: dict[str, Any], field: str) -> None:
    """Bounds on rounds, seeds and their product; laws with all they need."""
    with pytest.raises(Malformed) as refused:
        read_rehearsal(body(**changes), 0)
    assert refused.value.data["field"] == field


@pytest.mark.parametrize(
    ("change", "market", "code"),
    [
        (
            {"policy": {"method": "exptree"}},
            {"kind": "iid", "auction": "first"},
            "auction_not_for_method",
        ),
        ({}, {"kind": "iid", "values": {"law": "even", "high": "1"}}, "bad_field"),
        ({"policy": {"method": "magic"}}, {"kind": "iid"}, "bad_setting"),
    ],
)
def test_what_cannot_work_is_refused_before_it_is_played(
    change: dict[str, Any], market: dict[str, Any], code: str
) -> None:
    """As when a line item is created; only costly settings need no confirmation here."""
    config = {**CONFIG, "losses": "priced"}
    said = body(config=config, policies=[{"name": "a", "change": change}], market=market)
    wish = read_rehearsal(said, 0)
    with pytest.raises(Malformed) as refused:
        order_of(wish, wish["config"])
    assert refused.value.code == code


def test_a_costly_setting_needs_no_confirmation() -> None:
    """No money rides on it: that is what a rehearsal is for."""
    config = {**CONFIG, "value": {"ceiling": "5.00"}}
    said = body(config=config, policies=[{"name": "a", "change": {"policy": {"method": "ucbid"}}}])
    wish = read_rehearsal(said, 0)
    assert order_of(wish, wish["config"])["policies"][0]["config"]["policy"]["method"] == "ucbid"
