"""Outcomes stand or fall alone, each with what belongs to its kind."""

from __future__ import annotations

from decimal import Decimal
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.api.forms.outcomes import FORMS, _plain, _report, read_outcomes
from service.feedback import Receipt, Report


def read_row(row: object) -> Report | Receipt:
    """The one outcome of a call that has no other."""
    rows, _ = read_outcomes({"outcomes": [row]}, rows_max=1)
    return rows[0]


REF = "A" * 22
OUTCOMES = [
    (
        {"ticket": "t", "kind": "won", "clearing_cpm": Decimal("0.91"), "to_win_cpm": "0.9"},
        Report("won", ticket="t", clearing=910_000, to_win=900_000),
    ),
    (
        {
            "ticket": "t",
            "kind": "won",
            "clearing_cpm": "0.0000005",
            "at": "2026-12-01T10:00:00+01:00",
        },
        Report("won", ticket="t", clearing=0, at="2026-12-01T09:00:00Z"),
    ),
    ({"ticket": "t", "kind": "lost"}, Report("lost", ticket="t")),
    ({"ticket": "t", "kind": "lost", "clearing_cpm": "${PRICE}"}, Report("lost", ticket="t")),
    (
        {"ticket": "t", "kind": "void", "why": "creative"},
        Report("void", ticket="t", why="creative"),
    ),
    ({"ticket": "t", "kind": "billed", "clearing_cpm": 1}, Report("billed", "t", None, 1_000_000)),
    (
        {"ref": REF, "kind": "value", "value": "0", "event_id": "cv-124", "corrects": "cv-123"},
        Report("value", ref=REF, value=0, event_id="cv-124", corrects="cv-123"),
    ),
    (
        {"ticket": "t", "kind": "value", "value": "0.0000000025", "event_id": "cv-1"},
        Report("value", ticket="t", value=2, event_id="cv-1"),
    ),
]
REFUSED = [
    (7, "bad_field"),
    ({}, "bad_field"),
    ({"kind": ["won"]}, "bad_field"),
    ({"kind": "beaten", "ticket": "t"}, "bad_field"),
    ({"kind": "won", "clearing_cpm": 1}, "bad_ticket"),
    ({"kind": "won", "ticket": "x" * 513, "clearing_cpm": 1}, "bad_ticket"),
    ({"kind": "billed", "ticket": "t"}, "bad_price"),
    ({"kind": "won", "ticket": "t", "clearing_cpm": ""}, "bad_price"),
    ({"kind": "won", "ticket": "t", "clearing_cpm": "${AUCTION_PRICE}"}, "bad_price"),
    ({"kind": "won", "ticket": "t", "clearing_cpm": "AUDIT"}, "bad_price"),
    ({"kind": "won", "ticket": "t", "clearing_cpm": "0,91"}, "bad_price"),
    ({"kind": "won", "ticket": "t", "clearing_cpm": -1}, "bad_price"),
    ({"kind": "billed", "ticket": "t", "clearing_cpm": None}, "bad_price"),
    ({"kind": "lost", "ticket": "t", "to_win_cpm": "nan"}, "bad_price"),
    ({"kind": "value", "ref": REF, "value": True, "event_id": "e"}, "bad_value"),
    ({"kind": "value", "ref": REF, "value": "-1", "event_id": "e"}, "bad_value"),
    ({"kind": "value", "ref": "short", "value": "1", "event_id": "e"}, "bad_ref"),
    ({"kind": "value", "value": "1", "event_id": "e"}, "bad_field"),
    ({"kind": "value", "ref": REF, "value": "1"}, "bad_field"),
]


@pytest.mark.parametrize(("row", "report"), OUTCOMES)
def test_each_kind_of_outcome_is_read_with_what_belongs_to_it(
    row: dict[str, Any], report: Report
) -> None:
    """Prices and values are rounded half to even; what does not belong to a kind is left out."""
    assert read_row(row) == report


@pytest.mark.parametrize(("row", "code"), REFUSED)
def test_a_bad_outcome_is_a_refused_row_with_a_code(row: object, code: str) -> None:
    """A macro that nobody replaced or an empty price is never read as zero."""
    receipt = read_row(row)
    assert isinstance(receipt, Receipt)
    assert (receipt.status, receipt.code, receipt.ref) == ("refused", code, None)
    assert receipt.detail


def test_a_bad_outcome_spoils_no_other() -> None:
    """Rows keep their order, and the names of ignored fields are gathered."""
    rows, unused = read_outcomes(
        {
            "outcomes": [
                {"kind": "lost", "ticket": "t", "shiny": 1},
                7,
                {"kind": "lost", "ticket": "u"},
            ]
        },
        rows_max=3,
    )
    assert [type(row) for row in rows] == [Report, Receipt, Report]
    assert unused == {"shiny"}


NUMBERS: list[object] = [
    *(0, 1, -1, 2**70, True, None, 1.5, "0.41", "1e3", "", " 1", "-0.5", "${AUCTION_PRICE}"),
    *(Decimal("0.41"), Decimal("0.0000005"), Decimal("-0.41"), Decimal("1E+40"), Decimal("NaN")),
]
TICKETS: list[object] = ["t", "A-_z" * 40, "", "x" * 513, "two words", "\u00e4", "\ud800", None, 7]
plain_rows = some.fixed_dictionaries(
    {"kind": some.sampled_from([*FORMS, "beaten", None, ["won"], 1])},
    optional={
        "ticket": some.sampled_from(TICKETS),
        "clearing_cpm": some.sampled_from(NUMBERS),
        "to_win_cpm": some.sampled_from(NUMBERS),
        "at": some.sampled_from(["2026-12-01T10:00:00Z", "noon"]),
        "why": some.just("outbid"),
        "shiny": some.just(1),
    },
)


@given(plain_rows)
@settings(max_examples=500)
def test_what_is_read_without_its_form_is_what_the_form_reads(row: dict[str, object]) -> None:
    """The quick way says the same or nothing, and never takes what the form refuses."""
    quick = _plain(row)
    if quick is not None:
        unused: set[str] = set()
        assert (_report(row, unused), unused) == (quick, set())


@pytest.mark.parametrize("row", [row for row, _ in OUTCOMES[2:3] + OUTCOMES[5:6]])
def test_plain_outcomes_are_read_without_their_form(row: dict[str, object]) -> None:
    """Or the test above would say nothing."""
    assert _plain(row) is not None
