"""What holds for a whole request: seats, texts, auctions, ids and time, each at its edges."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.openrtb import codes
from service.openrtb.requests import (
    ID_CHARACTERS_MAX,
    IMPS_MAX,
    Asked,
    BadRequest,
    NoBid,
    auction_of,
    read,
    seated,
    texts,
)
from tests.openrtb.sources import asked, mapped, request


@pytest.mark.parametrize(
    ("place", "seat", "may"),
    [
        ({}, None, True),
        ({}, "s1", True),
        ({"wseat": []}, None, True),
        ({"wseat": ["s1"]}, "s1", True),
        ({"wseat": ["s1"]}, "s2", False),
        ({"wseat": ["s1"]}, None, False),
        ({"wseat": "s1"}, "s1", True),
        ({"bseat": ["s1"]}, "s1", False),
        ({"bseat": ["s1"]}, "s2", True),
        ({"bseat": ["s1"]}, None, True),
        ({"wseat": ["s1"], "bseat": ["s1"]}, "s1", False),
        ({"wseat": [7]}, "s1", True),
    ],
)
def test_who_may_buy_here(place: dict[str, Any], seat: str | None, may: bool) -> None:
    """A list of seats binds, one of blocked seats bars, and both together bar."""
    assert seated(place, seat) is may


@pytest.mark.parametrize(
    ("found", "said"),
    [
        (None, []),
        ("a", ["a"]),
        ("", [""]),
        (["a", 1, None, "b", ["c"]], ["a", "b"]),
        ({"a": 1}, []),
        (7, []),
        ([], []),
    ],
)
def test_texts_are_the_texts_of_a_list(found: object, said: list[str]) -> None:
    """One alone counts as a list of one, and what is no text is left out."""
    assert texts(found) == said


@pytest.mark.parametrize(
    ("kind", "inherited", "auction"),
    [
        (None, None, "second"),
        (None, "first", "first"),
        (1, "second", "first"),
        (2, "first", "second"),
        (2.0, None, "second"),
        (3, "first", None),
        (499, None, None),
        (500, None, "second"),
        (501, "first", None),
        (float(500), None, "second"),
        (10**9, None, None),
        (-500, None, None),
        ("2", "first", None),
        (False, None, None),
    ],
)
def test_a_kind_of_auction_is_known_or_it_is_none(
    kind: object, inherited: str | None, auction: str | None
) -> None:
    """The standard's two, those a mapping explains, and no guess beside them."""
    source = mapped(private_auctions={"500": "second"})
    assert auction_of(kind, source, inherited) == auction


@pytest.mark.parametrize(
    ("tmax", "margin_ms", "deadline_ms"),
    [
        (None, 20, None),
        (100, 0, 100),
        (100, 20, 80),
        (21, 20, 1),
        (10**12, 20, 59_980),
        (True, 20, None),
        ("100", 20, None),
        ([100], 20, None),
    ],
)
def test_the_margin_is_taken_off_the_time(
    tmax: object, margin_ms: int, deadline_ms: int | None
) -> None:
    """Counted from arrival, at most a minute; what is no number is no deadline."""
    found = asked(request(tmax=tmax), mapped(margin_ms=margin_ms))
    assert found.deadline_ms == deadline_ms


@given(some.integers(-(10**6), 10**6), some.integers(0, 10_000))
@settings(max_examples=60, deadline=None)
def test_no_deadline_is_nothing_or_less(tmax: int, margin_ms: int) -> None:
    """Where the margin eats it all nobody is asked, and the standard's code says why."""
    found = read(request(tmax=tmax), mapped(margin_ms=margin_ms))
    if min(tmax, 60_000) > margin_ms:
        assert isinstance(found, Asked)
        assert found.deadline_ms == min(tmax, 60_000) - margin_ms
    else:
        assert found == NoBid("r1", "no_time", codes.NO_TIME)


@pytest.mark.parametrize(
    ("test", "is_test"),
    [
        *((None, False), (0, False), (False, False), (0.0, False)),
        *((1, True), (True, True), (2, True), ("0", True), ("", True), ([], True), (-1, True)),
    ],
)
def test_a_request_is_a_test_unless_it_says_no(test: object, is_test: bool) -> None:
    """Nobody pays for a test, so nothing may be set aside where it might be one."""
    assert asked(request(test=test)).test is is_test


@pytest.mark.parametrize("size", [1, ID_CHARACTERS_MAX])
def test_ids_up_to_the_limit_are_taken(size: int) -> None:
    """Of the request and of its imps."""
    found = asked({"id": "r" * size, "imp": [{"id": "i" * size}]})
    assert (len(found.id), len(found.imps)) == (size, 1)


def test_an_imp_with_too_long_an_id_is_left_alone() -> None:
    """The others are priced, up to as many as anybody sells at once."""
    long = {"id": "i" * (ID_CHARACTERS_MAX + 1)}
    rest = [{"id": f"{number}"} for number in range(IMPS_MAX - 1)]
    assert len(asked({"id": "r", "imp": [long, *rest]}).imps) == IMPS_MAX - 1
    with pytest.raises(BadRequest, match="too many"):
        read({"id": "r", "imp": [long, *rest, {"id": "x"}]}, mapped())


@pytest.mark.parametrize(
    ("named", "found"),
    [
        (None, ("EUR", "USD")),
        ([], ("EUR", "USD")),
        ("", ("EUR", "USD")),
        (["gbp"], ("GBP",)),
        (["GBP", "gbp", "JPY"], ("GBP", "JPY")),
        (["GBP", "££", "12A", 7], ("GBP",)),
    ],
)
def test_the_sellers_currencies_come_first_and_ours_where_none_is_named(
    named: object, found: tuple[str, ...]
) -> None:
    """Each once, in capitals, in the seller's order."""
    assert asked(request(cur=named), mapped(currencies=["EUR", "USD"])).currencies == found


def test_of_several_faults_the_seat_is_said_first_and_then_the_time() -> None:
    """One word for each request, and always the same one."""
    body = request(wseat=["s2"], tmax=1, cur=["££"])
    assert read(body, mapped(seat="s1")) == NoBid("r1", "seat_not_allowed")
    assert read(body, mapped(seat="s2")) == NoBid("r1", "no_time", 15)
    assert read(request(cur=["££"]), mapped()) == NoBid("r1", "no_currency")
