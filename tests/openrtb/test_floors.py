"""Floors and quantities to the last nano: by hand, by property, and every way to be unreadable."""

from __future__ import annotations

from decimal import ROUND_CEILING, Decimal
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service import money
from service.openrtb.floors import MULTIPLIER_MAX, WHOLE, BadFloor, cpm, floor_of, multiplier_of


@pytest.mark.parametrize(
    ("written", "nanos"),
    [
        (None, 0),
        (0, 0),
        (0.0, 0),
        (-0.0, 0),
        (1, 1_000_000),
        (1.0, 1_000_000),
        (0.000001, 1),
        (0.0000011, 2),
        (0.0000019, 2),
        (1.1, 1_100_000),
        (2.675, 2_675_000),
        (0.1, 100_000),
        (Decimal("0.0000001"), 1),
        (Decimal("3.25"), 3_250_000),
        (-0.01, 0),
        (-5, 0),
        (10**9, 10**15),
    ],
)
def test_a_floor_is_read_as_it_was_written(written: object, nanos: int) -> None:
    """A float by its shortest text, rounded up to a nano; less than nothing is no floor."""
    assert cpm(written) == nanos


@pytest.mark.parametrize(
    "written",
    [
        *(True, False, "1", "", b"1", [], {}, (1,), object()),
        *(float("inf"), float("-inf"), float("nan"), 2.0**63, -(2.0**63), 10**9 + 1),
        *(Decimal("NaN"), Decimal("Infinity"), Decimal("1e999999")),
    ],
    ids=repr,
)
def test_what_is_no_floor_is_refused_and_never_guessed(written: object) -> None:
    """Truth values, texts, lists, numbers that are none or that no seller means."""
    with pytest.raises(BadFloor):
        cpm(written)


@given(some.decimals(min_value=0, max_value=10**6, places=9))
@settings(max_examples=60, deadline=None)
def test_a_floor_is_the_next_whole_nano_above(written: Decimal) -> None:
    """Held against the ceiling rule of the standard library's decimals."""
    exact = (written * money.NANOS_PER_CPM).to_integral_value(ROUND_CEILING)
    assert cpm(written) == int(exact)


@given(some.floats(1e-9, 10**6), some.floats(1e-9, 10**6))
@settings(max_examples=60, deadline=None)
def test_a_higher_floor_is_never_read_as_a_lower_one(one: float, other: float) -> None:
    """Rounding keeps the order, or a cheaper bid would pass the dearer floor."""
    low, high = sorted((one, other))
    assert cpm(low) <= cpm(high)


@pytest.mark.parametrize(
    ("imp", "parts"),
    [
        ({}, WHOLE),
        ({"qty": None}, WHOLE),
        ({"qty": []}, WHOLE),
        ({"qty": {}}, WHOLE),
        ({"qty": {"multiplier": None}}, WHOLE),
        ({"qty": {"multiplier": 1}}, WHOLE),
        ({"qty": {"multiplier": 30.3}}, 30_300_000_000),
        ({"qty": {"multiplier": 0.5}}, 500_000_000),
        ({"qty": {"multiplier": 1e-9}}, 1),
        ({"qty": {"multiplier": 1.5e-9}}, 2),
        ({"qty": {"multiplier": Decimal("2.0000000001")}}, 2_000_000_001),
        ({"qty": {"multiplier": MULTIPLIER_MAX}}, MULTIPLIER_MAX * WHOLE),
    ],
)
def test_a_quantity_is_read_in_parts_of_a_billion(imp: dict[str, Any], parts: int) -> None:
    """Rounded up, since the hold goes by it; what is not said is one impression."""
    assert multiplier_of(imp) == parts


@pytest.mark.parametrize(
    "multiplier",
    [
        *(0, 0.0, -1, -0.5, MULTIPLIER_MAX + 1, True, "2", [2], float("nan"), float("inf")),
        *(Decimal("NaN"), Decimal("sNaN"), Decimal("-Infinity")),
    ],
    ids=repr,
)
def test_a_quantity_that_is_none_is_refused(multiplier: object) -> None:
    """Nobody, less than nobody, beyond any crowd, or not a number."""
    with pytest.raises(BadFloor):
        multiplier_of({"qty": {"multiplier": multiplier}})


@pytest.mark.parametrize(
    ("deal", "floor"),
    [
        ({}, (0, "USD")),
        ({"bidfloor": 2}, (2_000_000, "USD")),
        ({"bidfloor": 2, "bidfloorcur": "eur"}, (2_000_000, "EUR")),
        ({"bidfloor": 2, "bidfloorcur": ""}, (2_000_000, "USD")),
        ({"bidfloor": 2, "mincpmpersec": 0.1}, (3_000_000, "USD")),
        ({"bidfloor": 2, "durfloors": [{"bidfloor": 4}]}, (4_000_000, "USD")),
        ({"bidfloor": 2, "durfloors": [{"mindur": 31, "bidfloor": 4}]}, (2_000_000, "USD")),
        ({"bidfloor": 2, "durfloors": [{"maxdur": 29, "bidfloor": 4}]}, (2_000_000, "USD")),
        ({"bidfloor": 2, "durfloors": [None, 7, {"bidfloor": 1}]}, (1_000_000, "USD")),
        ({"bidfloor": 2, "durfloors": []}, (2_000_000, "USD")),
        ({"bidfloor": 2, "durfloors": "none"}, (2_000_000, "USD")),
    ],
)
def test_a_deal_inherits_nothing_of_its_imp(deal: dict[str, Any], floor: tuple[int, str]) -> None:
    """Neither the floor nor the currency: 30 seconds of video, whose imp asks 9 pounds."""
    imp = {"bidfloor": 9, "bidfloorcur": "GBP", "video": {"mincpmpersec": 7}}
    assert floor_of(imp, "video", deal, 30) == floor


@pytest.mark.parametrize("media", ["banner", "native"])
def test_what_lasts_no_time_has_no_floor_by_time(media: str) -> None:
    """A price per second of a banner means nothing, so the plain floor counts."""
    imp = {"bidfloor": 1, media: {"mincpmpersec": 5, "durfloors": [{"bidfloor": 8}]}}
    assert floor_of(imp, media, None, None) == (1_000_000, "USD")


@pytest.mark.parametrize("media", ["video", "audio"])
@pytest.mark.parametrize("way", [{"mincpmpersec": 0.5}, {"durfloors": [{"bidfloor": 1}]}])
def test_a_floor_by_time_needs_a_duration(media: str, way: dict[str, Any]) -> None:
    """Of a creative of unknown length nobody can say that it pays enough."""
    with pytest.raises(BadFloor, match="no duration"):
        floor_of({"bidfloor": 1, media: way}, media, None, None)


@pytest.mark.parametrize("currency", ["US", "USDX", "€€€", 7, ["USD"], {"a": 1}])
def test_a_floor_in_no_currency_is_refused(currency: object) -> None:
    """Three plain letters, or nobody knows what the number is worth."""
    with pytest.raises(BadFloor, match="no currency"):
        floor_of({"bidfloor": 1, "bidfloorcur": currency}, "banner", None, None)


@given(some.lists(some.tuples(some.integers(0, 60), some.integers(0, 60), some.integers(0, 50))))
@settings(max_examples=60, deadline=None)
def test_of_ranges_that_overlap_the_dearest_counts_in_any_order(
    ranges: list[tuple[int, int, int]],
) -> None:
    """The highest floor of those that cover the duration breaks none of them."""
    told = [{"mindur": low, "maxdur": high, "bidfloor": floor} for low, high, floor in ranges]
    fitting = [floor for low, high, floor in ranges if low <= 30 <= high]
    wanted = (max(fitting, default=1) * money.NANOS_PER_CPM, "USD")
    for order in (told, told[::-1]):
        imp = {"bidfloor": 1, "video": {"durfloors": order}}
        assert floor_of(imp, "video", None, 30) == wanted
