"""Figures are written with enough decimals, and what cannot be known is a dash."""

from __future__ import annotations

from collections import Counter

from service.commands import report


def test_amounts_are_written_in_full() -> None:
    """To the nano, with the currency."""
    assert report.amount(3_999_766_512, "EUR") == "3.999766512 EUR"


def test_prices_are_written_as_cpm() -> None:
    """A million nanos per impression are one unit of CPM."""
    assert report.cpm(1_234_567) == "1.235"
    assert report.interval(1_000_000, 2_345_678) == "1.00 to 2.35"


def test_a_share_of_nothing_is_a_dash() -> None:
    """Nobody divides by zero."""
    assert (report.share(1, 3), report.share(0, 0)) == ("33.3 %", "-")


def test_reasons_come_most_frequent_first() -> None:
    """With none, the word says so."""
    counts = Counter({"past_deadline": 2, "budget_held": 2532})
    assert report.reasons(counts) == "2,532 budget_held, 2 past_deadline"
    assert report.reasons(Counter()) == "none"
