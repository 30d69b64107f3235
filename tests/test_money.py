"""Money is exact, rounds in the named direction, and refuses what is no amount."""

from __future__ import annotations

import json
from decimal import Decimal
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service import money

AMOUNTS = [
    ("500.00", 500 * 10**9),
    ("0.000000001", 1),
    ("0", 0),
    ("-0.00", 0),
    ("-1.5", -1_500_000_000),
    ("2.40", 2_400_000_000),
    (2, 2_000_000_000),
    (Decimal("2.4"), 2_400_000_000),
    (Decimal("1E+2"), 100 * 10**9),
    ("4611686018.427387904", 2**62),
    ("-4611686018.427387904", -(2**62)),
]

PRICES = [
    ("0.000001", 1),
    (Decimal("8.0"), 8_000_000),
    (1, 1_000_000),
    ("1.234567", 1_234_567),
    ("1000000000", 10**15),
]

ROUNDED = [
    ("0.0000015", money.DOWN, 1),
    ("0.0000015", money.UP, 2),
    ("0.0000015", money.HALF_EVEN, 2),
    ("0.0000025", money.HALF_EVEN, 2),
    ("0.00000250000000000000000000001", money.HALF_EVEN, 3),
    ("0.000000000000000000000000000001", money.UP, 1),
    ("0.000000000000000000000000000001", money.DOWN, 0),
    ("-0.0000015", money.DOWN, -2),
    ("-0.0000015", money.UP, -1),
]

NO_AMOUNTS = [
    None,
    True,
    False,
    1.5,
    float("nan"),
    "",
    " ",
    "1 ",
    " 1",
    "1\n",
    "+1",
    "1,5",
    "1_000",
    "1e3",
    "1.",
    ".5",
    "01",
    "--1",
    "0x10",
    "nan",
    "Infinity",
    "1.1234567890123456789012345678901",
    "12345678901234567890",
    "\u0661",
    "\ud800",
    "1\x00",
    "${AUCTION_PRICE}",
    b"1",
    [1],
    {"amount": 1},
    Decimal("NaN"),
    Decimal("sNaN"),
    Decimal("-Infinity"),
    Decimal("1E+999"),
    Decimal("1E-999"),
    Decimal("0E+999999"),
    Decimal("1." + "1" * 60),
    10**400,
    2**62,
    "4611686018.427387905",
]


@pytest.mark.parametrize(("given_amount", "expected"), AMOUNTS)
def test_amounts_are_read_exactly(given_amount: object, expected: int) -> None:
    """A decimal amount becomes the nanos it names, to the last one and up to both ends."""
    assert money.nanos(given_amount) == expected


@pytest.mark.parametrize(("cpm", "expected"), PRICES)
def test_a_millionth_of_a_cpm_is_one_nano_per_impression(cpm: object, expected: int) -> None:
    """A CPM price is a thousand impressions' worth, so six decimals are exact."""
    assert money.price(cpm) == expected


@pytest.mark.parametrize(("cpm", "rounding", "expected"), ROUNDED)
def test_prices_round_in_the_direction_asked_for(cpm: str, rounding: str, expected: int) -> None:
    """Bids round down, floors and holds up, spend half-even from the exact decimal."""
    assert money.price(cpm, rounding) == expected


@pytest.mark.parametrize("thing", NO_AMOUNTS, ids=lambda thing: repr(thing)[:30])
def test_what_is_no_amount_is_refused_by_every_reader(thing: object) -> None:
    """Floats, truth values, exponents in text, macros and giants are no money anywhere."""
    with pytest.raises(money.NotMoney):
        money.nanos(thing)
    for rounding in (money.DOWN, money.UP, money.HALF_EVEN):
        with pytest.raises(money.NotMoney):
            money.nanos_rounded(thing, rounding)
        with pytest.raises(money.NotMoney):
            money.price(thing, rounding)


@pytest.mark.parametrize("cpm", ["0.0000001", Decimal("1.2345678")])
def test_a_seventh_decimal_is_refused_without_a_rounding(cpm: object) -> None:
    """Nobody's configured price is changed silently."""
    with pytest.raises(money.NotMoney, match="decimals"):
        money.price(cpm)


def test_a_tenth_decimal_of_an_amount_is_refused() -> None:
    """A budget finer than a nano has no exact form, so it is refused."""
    with pytest.raises(money.NotMoney, match="decimals"):
        money.nanos("0.0000000001")


@given(st.integers(-money.NANOS_MAX, money.NANOS_MAX))
def test_text_brings_back_the_same_amount(amount: int) -> None:
    """Writing an amount and reading it again changes nothing, over the whole range."""
    text = money.nanos_text(amount)
    assert money.nanos(text) == amount
    assert len(text.partition(".")[2]) >= 2


@given(st.integers(-money.PRICE_NANOS_MAX, money.PRICE_NANOS_MAX))
def test_a_json_number_brings_back_the_same_price(price: int) -> None:
    """A price survives a JSON number, read by a decimal parser or by a float parser."""
    text = json.dumps(money.cpm_number(price))
    assert money.price(json.loads(text, parse_float=Decimal)) == price
    assert round(json.loads(text) * 10**6) == price


@given(st.decimals(-(10**9), 10**9, places=20))
def test_each_rounding_errs_by_less_than_a_nano_and_to_its_side(cpm: Decimal) -> None:
    """Down is never above, up never below, half-even within half a nano of the exact price."""
    exact = Fraction(cpm) * money.NANOS_PER_CPM
    below, above = money.price(cpm, money.DOWN), money.price(cpm, money.UP)
    assert exact - 1 < below <= exact <= above < exact + 1
    assert abs(money.price(cpm, money.HALF_EVEN) - exact) <= Fraction(1, 2)


@given(st.text(max_size=40))
def test_no_text_makes_a_reader_fail_otherwise(text: str) -> None:
    """Whatever the text, it is an exact amount or a refusal, never another error."""
    try:
        amount = money.nanos_rounded(text, money.HALF_EVEN)
    except money.NotMoney:
        return
    assert abs(Fraction(text) * money.NANOS_PER_UNIT - amount) <= Fraction(1, 2)
