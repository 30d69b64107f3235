"""How numbers are written: with units, never as nothing where there is something."""

from __future__ import annotations

import pytest

from service.judging import Alarm
from service.watch import words

UNIT = 10**9
NOW_MS = 1_764_600_000_000  # 2025-12-01T14:40:00Z.


@pytest.mark.parametrize(
    ("nanos", "text"),
    [
        (None, "none"),
        (0, "0.00 EUR"),
        (12 * UNIT, "12.00 EUR"),
        (1_234_567 * UNIT, "1,234,567.00 EUR"),
        (5_000_000, "0.005 EUR"),
        (1, "0.000000001 EUR"),
        (100_000_000, "0.10 EUR"),
        (-500_000_000, "-0.50 EUR"),
        (-3 * UNIT, "-3.00 EUR"),
    ],
)
def test_amounts_name_their_currency(nanos: int | None, text: str) -> None:
    """Small amounts keep three digits, large ones are grouped."""
    assert words.amount(nanos, "EUR") == text


def test_prices_are_cpm() -> None:
    """A price per impression is shown per thousand."""
    assert words.cpm(8_000_000, "EUR") == "8.00 EUR CPM"
    assert words.cpm(None, "EUR") == "none"
    assert words.cpm_plain(123_456) == "0.123"


@pytest.mark.parametrize(
    ("ago_s", "text"), [(0, "0 s"), (59, "59 s"), (60, "1 min"), (7300, "2 h"), (200_000, "2 d")]
)
def test_ages_are_in_the_largest_unit(ago_s: int, text: str) -> None:
    """Nobody divides by sixty at night."""
    assert words.age(NOW_MS - 1000 * ago_s, NOW_MS) == text


def test_an_age_is_never_below_zero() -> None:
    """Clocks of two machines may differ; what never came has no age."""
    assert words.age(NOW_MS + 5000, NOW_MS) == "0 s"
    assert words.age(None, NOW_MS) == "none"


def test_moments_are_in_the_zone_and_in_utc() -> None:
    """The day is named unless it is today there."""
    assert words.moment(NOW_MS, "Europe/Zurich", NOW_MS) == "15:40:00 Zurich (14:40:00 UTC)"
    tomorrow = words.moment(NOW_MS + 86_400_000, "Europe/Zurich", NOW_MS)
    assert tomorrow == "2025-12-02 15:40:00 Zurich (14:40:00 UTC)"
    assert words.moment(NOW_MS, "America/New_York").endswith("09:40:00 New York (14:40:00 UTC)")
    assert words.moment(NOW_MS, "UTC", NOW_MS) == "14:40:00 UTC"
    assert words.moment(None, "UTC") == "none"


@pytest.mark.parametrize(
    ("alarm", "text"),
    [
        (Alarm(0, 0, 0, {}), "There are no line items yet."),
        (Alarm(41, 0, 0, {}), "None of 41 line items needs you."),
        (Alarm(1, 1, 0, {"EUR": 0}), "The one line item needs you."),
        (
            Alarm(41, 3, 0, {"EUR": 720 * UNIT}),
            "3 of 41 line items need you; 12.00 EUR a minute at stake.",
        ),
        (
            Alarm(41, 1, 2, {"CHF": 60 * UNIT, "EUR": 120 * UNIT}),
            "1 of 41 line items needs you; 1.00 CHF and 2.00 EUR a minute at stake; "
            "2 frozen by people.",
        ),
    ],
)
def test_the_first_sentence(alarm: Alarm, text: str) -> None:
    """How many need somebody, what is at stake in each currency, what people have stopped."""
    assert words.sentence(alarm) == text


def test_amounts_of_currencies_stand_side_by_side() -> None:
    """They are never added."""
    assert words.amounts({"CHF": UNIT, "EUR": 2 * UNIT}) == "1.00 CHF and 2.00 EUR"
    assert words.amounts({}) == "nothing"


def test_shares_say_of_what() -> None:
    """Five per cent of nothing is no share."""
    assert words.share(3, 200) == "2 % of 200"
    assert words.share(0, 0) == "no bids"


def test_a_moment_goes_into_a_form_as_the_form_takes_it() -> None:
    """With its zone and to the millisecond, so that nothing beside it is named."""
    assert words.typed(NOW_MS + 7) == "2025-12-01T14:40:00.007Z"


def test_what_a_tripwire_says_is_a_sentence() -> None:
    """It begins with a capital and ends with one full stop, and is otherwise left as it is."""
    assert words.sentences("7 values are large") == "7 values are large."
    assert words.sentences("the kl-ucbid learner is halted.") == "The kl-ucbid learner is halted."
    assert words.sentences("") == "."
