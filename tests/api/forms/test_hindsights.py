"""The form of a question of hindsight: each alternative in our units, and what is no question."""

from __future__ import annotations

from itertools import combinations
from typing import Any

import pytest

from service.api.forms.hindsights import ALTERNATIVES, HindsightForm
from service.api.forms.reading import read
from service.errors import Malformed
from service.hindsights import Question

GOOD: dict[str, object] = {
    "bid_cap_cpm": 2,
    "flat_price_cpm": 2,
    "floor_cpm": 2,
    "method": "kl-ucbid",
}


def asked(**members: Any) -> Question:
    """The question of a body."""
    return read(HindsightForm, members).question


@pytest.mark.parametrize(
    ("name", "kind"), [("bid_cap_cpm", "cap"), ("flat_price_cpm", "flat"), ("floor_cpm", "floor")]
)
@pytest.mark.parametrize(("cpm", "nanos"), [(2, 2_000_000), ("0.000001", 1), ("1.5", 1_500_000)])
def test_a_price_is_read_in_nanos_per_impression(
    name: str, kind: str, cpm: object, nanos: int
) -> None:
    """A CPM, as a number or as a decimal string, whatever it is asked of."""
    assert asked(**{name: cpm}) == Question(kind, nanos)  # type: ignore[arg-type]


def test_a_floor_of_nothing_is_a_question() -> None:
    """What an exchange without floors would have brought may be asked; a cap of nothing not."""
    assert asked(floor_cpm=0) == Question("floor", 0)
    for name in ("bid_cap_cpm", "flat_price_cpm"):
        with pytest.raises(Malformed):
            asked(**{name: 0})


def test_a_method_is_asked_by_its_name() -> None:
    """Whether there is such a method is not for the form to say."""
    assert asked(method="nobody-knows") == Question("method", 0, "nobody-knows")


def test_a_span_is_read_in_milliseconds() -> None:
    """Of wall clock, with its offset."""
    said = {"from_at": "2026-12-01T00:00:00Z", "until_at": "2026-12-01T02:00:00+01:00"}
    found = asked(method="mean", **said)
    assert found.from_ms == 1_796_083_200_000
    assert found.until_ms == found.from_ms + 3_600_000


@pytest.mark.parametrize("pair", list(combinations(ALTERNATIVES, 2)))
def test_two_alternatives_are_no_question(pair: tuple[str, str]) -> None:
    """One difference at a time, or nobody knows what made the difference."""
    with pytest.raises(Malformed) as caught:
        asked(**{name: GOOD[name] for name in pair})
    assert caught.value.code == "bad_field"


@pytest.mark.parametrize(
    "members",
    [
        {},
        {"from_at": "2026-12-01T00:00:00Z"},
        {"method": ""},
        {"method": "x" * 41},
        {"method": 7},
        {"bid_cap_cpm": -1},
        {"floor_cpm": -1},
        {"flat_price_cpm": "dear"},
        {"flat_price_cpm": True},
        {"flat_price_cpm": "0.0000001"},
        {"method": "mean", "from_at": "yesterday"},
        {"method": "mean", "until_at": "2026-12-01T00:00:00"},
        {"method": "mean", "colour": "blue"},
    ],
)
def test_what_is_no_question_is_refused(members: dict[str, Any]) -> None:
    """With the one code for fields, and without echoing what was sent."""
    with pytest.raises(Malformed) as caught:
        asked(**members)
    assert caught.value.code in ("bad_field", "unknown_field")
    for word in ("dear", "yesterday", "blue"):
        assert word not in caught.value.detail
