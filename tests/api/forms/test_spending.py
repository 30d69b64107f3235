"""What a line item says of its spend: pacing, its profile and the return it must bring."""

from __future__ import annotations

from decimal import Decimal
from typing import Any

import pytest

from service.api.forms.configs import read_changes, read_new
from service.errors import Malformed
from tests.api.forms.test_line_items import SMALLEST, TODAY_MS

HALVES = [Decimal("0.5"), *[1] * 23]


def test_pacing_and_target_reach_the_config() -> None:
    """The profile as it came, the target in millionths, what nobody named left to the story."""
    members = {
        **SMALLEST,
        "pacing": {"method": "entropy", "profile": HALVES},
        "return_target": {"value_per_unit": "2.5"},
    }
    config, _ = read_new(members, TODAY_MS)
    assert config["pacing"] == {"method": "entropy", "profile": [0.5, *[1] * 23]}
    assert config["return_target"] == {"value_per_unit": 2_500_000, "strict": False}
    bare, _ = read_new(SMALLEST, TODAY_MS)
    assert (bare["pacing"], bare["return_target"]) == ({"profile": None}, None)


def test_a_new_target_replaces_the_old_as_a_whole() -> None:
    """Strict of before is not kept beside the target of now, and null takes it back."""
    changes, _ = read_changes({"return_target": {"value_per_unit": 3}})
    assert changes == {"return_target": {"value_per_unit": 3_000_000, "strict": False}}
    assert read_changes({"return_target": None})[0] == {"return_target": None}
    assert read_changes({"pacing": {"profile": None}})[0] == {"pacing": {"profile": None}}


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"pacing": {"method": "evenly"}}, "pacing.method"),
        ({"pacing": {"profile": [1] * 23}}, "pacing.profile"),
        ({"pacing": {"profile": [0] * 24}}, "pacing.profile"),
        ({"pacing": {"profile": [*[1] * 23, True]}}, "pacing.profile"),
        ({"pacing": {"profile": [*[1] * 23, -1]}}, "pacing.profile"),
        ({"pacing": {"profile": [*[1] * 23, 10**6 + 1]}}, "pacing.profile"),
        ({"pacing": {"profile": [*[1] * 23, "1"]}}, "pacing.profile"),
        ({"return_target": "2.0"}, "return_target"),
        ({"return_target": {}}, "return_target.value_per_unit"),
        ({"return_target": {"value_per_unit": "0"}}, "return_target.value_per_unit"),
        ({"return_target": {"value_per_unit": "0.0000001"}}, "return_target.value_per_unit"),
        ({"return_target": {"value_per_unit": 10**6 + 1}}, "return_target.value_per_unit"),
        ({"return_target": {"value_per_unit": "many"}}, "return_target.value_per_unit"),
        ({"return_target": {"value_per_unit": 1, "strict": 1}}, "return_target.strict"),
    ],
)
def test_what_is_no_pacing_and_no_target_is_named(change: dict[str, Any], field: str) -> None:
    """By the path of the field, and without a word of what came."""
    with pytest.raises(Malformed) as caught:
        read_new({**SMALLEST, **change}, TODAY_MS)
    assert caught.value.data == {"field": field}
