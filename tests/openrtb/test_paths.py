"""Which places of a request may be read, what is found there, and that none leads to a person."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.openrtb.paths import ALLOWED, CHARACTERS_MAX, OLDER, Path, path, sizes, word

JSON = some.recursive(
    some.none() | some.booleans() | some.integers() | some.floats() | some.text(max_size=5),
    lambda inner: (
        some.lists(inner, max_size=3)
        | some.dictionaries(some.sampled_from(["geo", "cat", "w", "h", "id"]), inner, max_size=3)
    ),
    max_leaves=6,
)


def known(name: str) -> Path:
    """A path that may be named."""
    found = path(name)
    assert found is not None
    return found


@pytest.mark.parametrize(
    "name",
    [
        *("user.id", "user.buyeruid", "user.yob", "user.ext.consent", "user.data"),
        *("device.ip", "device.ipv6", "device.ifa", "device.didsha1", "device.ua", "device.sua"),
        *("device.geo.lat", "device.geo.lon", "device.geo.city", "device.geo.zip"),
        *("site.page", "site.ref", "site.search", "regs.ext.us_privacy", "regs.gpp"),
        *("imp.ext.private", "ext.any", "", "imp", "imp.", ".at", "imp.metric", "imp.metric."),
        *("imp.metric.UPPER", "imp.metric." + "x" * 41, "imp.metric.a b", "IMP.tagid"),
    ],
)
def test_nothing_that_leads_to_a_person_may_be_named(name: str) -> None:
    """Nor a device, an address, a finer place, a consent text, a page, or a private field."""
    assert path(name) is None


@pytest.mark.parametrize("name", sorted(ALLOWED))
def test_every_listed_place_is_found_where_its_name_says(name: str) -> None:
    """Put something there, and just that is found."""
    found = known(name)
    if name in ("imp.type", "imp.size"):
        return
    keys = name.split(".")
    nested: Any = "here"
    for key in reversed(keys[1:] if keys[0] == "imp" else keys):
        nested = {key: nested}
    request, imp = ({}, nested) if keys[0] == "imp" else (nested, {})
    assert found.find(request, imp) == "here"
    assert found.find({}, {}) is None


@pytest.mark.parametrize("name", sorted(OLDER))
def test_an_older_sender_is_understood_and_the_newer_place_comes_first(name: str) -> None:
    """What moved in 2.6 is looked for in its old place only where the new one is empty."""
    found = known(name)
    older: Any = 1
    for key in reversed(OLDER[name].split(".")):
        older = {key: older}
    assert found.feature(older, {}) is True
    top, *rest = name.split(".")
    newer: Any = 0
    for key in reversed(rest):
        newer = {key: newer}
    assert found.feature({top: {**older[top], **newer}}, {}) is False


@pytest.mark.parametrize(
    ("found", "said"),
    [
        ("x", "x"),
        ("", ""),
        (True, "1"),
        (False, "0"),
        (7, "7"),
        (7.0, "7"),
        (-0.0, "0"),
        (0.5, "0.5"),
        (2**62, str(2**62)),
        (2**63, None),
        (None, None),
        ([], None),
        ({}, None),
        (b"x", None),
    ],
)
def test_one_word_however_a_sender_writes_it(found: object, said: str | None) -> None:
    """A whole float is the integer, a truth value is 1 or 0, anything larger is nothing."""
    assert word(found) == said


@given(some.integers(-(2**53) + 1, 2**53 - 1))
@settings(max_examples=50, deadline=None)
def test_a_number_is_the_same_word_as_int_and_as_float(number: int) -> None:
    """Parsers differ in which of the two they make."""
    assert word(number) == word(float(number)) == str(number)


@pytest.mark.parametrize(
    ("name", "value", "feature"),
    [
        ("device.devicetype", 4, "4"),
        ("device.devicetype", 4.0, "4"),
        ("device.devicetype", "4", "4"),
        ("device.devicetype", None, None),
        ("device.os", "alpine", "alpine"),
        ("device.os", "", None),
        ("device.os", "x" * CHARACTERS_MAX, "x" * CHARACTERS_MAX),
        ("device.os", "x" * (CHARACTERS_MAX + 1), None),
        ("device.os", "a\nb", None),
        ("device.os", {"name": "alpine"}, None),
        ("device.w", 390, 390),
        ("device.w", 390.5, 390.5),
        ("device.w", "390", None),
        ("device.w", True, None),
        ("device.w", float("inf"), None),
        ("device.w", float("nan"), None),
        ("device.w", 2**53, None),
        ("device.lmt", 1, True),
        ("device.lmt", 0, False),
        ("device.lmt", "1", True),
        ("device.lmt", 2, False),
        ("device.lmt", True, True),
        ("device.lmt", None, None),
    ],
)
def test_a_feature_is_of_its_kind_or_missing(name: str, value: object, feature: object) -> None:
    """Names and codes as text, numbers as numbers, flags as truth values; the rest is missing."""
    last = name.rpartition(".")[2]
    found = known(name).feature({"device": {last: value}}, {})
    assert (found, type(found)) == (feature, type(feature))


@pytest.mark.parametrize(
    ("cat", "first", "words"),
    [
        (["IAB1", "IAB2"], "IAB1", ["IAB1", "IAB2"]),
        ("IAB1", "IAB1", ["IAB1"]),
        ([], None, []),
        ([None, "IAB2"], None, ["IAB2"]),
        ([["IAB1"], 7], None, ["7"]),
        (None, None, []),
    ],
)
def test_of_several_the_first_is_the_feature_and_all_are_compared(
    cat: object, first: str | None, words: list[str]
) -> None:
    """The seller thinks most of the first; a condition may name any."""
    body = {"site": {"cat": cat}}
    assert known("site.cat").feature(body, {}) == first
    assert known("site.cat").words(body, {}) == words


@pytest.mark.parametrize(
    ("imp", "found"),
    [
        ({}, None),
        ({"metric": None}, None),
        ({"metric": [{"type": "other", "value": 0.2}]}, None),
        ({"metric": [{"type": "viewability", "value": 0.7}]}, 0.7),
        ({"metric": [7, {"type": "viewability", "value": 0.7}]}, 0.7),
        ({"metric": [{"type": "viewability"}]}, None),
        ({"metric": [{"type": "viewability", "value": "high"}]}, None),
        ({"metric": {"type": "viewability", "value": 0.7}}, None),
    ],
)
def test_a_metric_is_found_by_its_type(imp: dict[str, Any], found: float | None) -> None:
    """The first of its type, and only as a number."""
    assert known("imp.metric.viewability").feature({}, imp) == found


@pytest.mark.parametrize(
    ("imp", "kind"),
    [
        ({}, None),
        ({"banner": {}}, "banner"),
        ({"video": {}, "banner": {}}, "banner+video"),
        ({"native": {}, "video": {}, "banner": {}, "audio": {}}, "audio+banner+native+video"),
        ({"pmp": {}}, None),
    ],
)
def test_the_type_of_an_imp_is_all_its_media_in_one_order(
    imp: dict[str, Any], kind: str | None
) -> None:
    """However the sender orders them, so that equal imps are one feature."""
    assert known("imp.type").feature({}, imp) == kind


@pytest.mark.parametrize(
    ("imp", "named"),
    [
        ({}, []),
        ({"banner": None}, []),
        ({"banner": {"w": 300, "h": 250}}, ["300x250"]),
        ({"banner": {"w": 300}}, []),
        ({"banner": {"w": 0, "h": 250}}, []),
        ({"banner": {"w": 300.0, "h": 250}}, []),
        ({"banner": {"w": True, "h": True}}, []),
        ({"banner": {"w": 100_000, "h": 1}}, []),
        ({"banner": {"format": [{"w": 1, "h": 2}, None, {"w": 3, "h": 4}]}}, ["1x2", "3x4"]),
        ({"banner": {"format": [{"w": 1, "h": 2}], "w": 3, "h": 4}}, ["1x2", "3x4"]),
        ({"video": {"w": 640, "h": 360}, "banner": {"w": 1, "h": 1}}, ["1x1", "640x360"]),
        ({"banner": {"format": {"w": 1, "h": 2}}}, []),
    ],
)
def test_sizes_are_those_that_are_sizes(imp: dict[str, Any], named: list[str]) -> None:
    """Formats before the plain size, banner before video, and nothing that is no size."""
    assert sizes(imp) == named
    assert known("imp.size").feature({}, imp) == (named[0] if named else None)


@given(some.sampled_from(sorted(ALLOWED)), JSON, JSON)
@settings(max_examples=80, deadline=None)
def test_no_request_breaks_a_path(name: str, inside: Any, imp: Any) -> None:
    """Whatever stands anywhere, a feature is a short text, a number, a truth value or missing."""
    request = {part: inside for part in ("site", "app", "device", "regs", "source", "dooh", "at")}
    slot = imp if isinstance(imp, dict) else {"banner": imp, "video": imp, "metric": imp}
    found = known(name).feature(request, slot)
    assert found is None or isinstance(found, str | int | float | bool)
    assert not isinstance(found, str) or 0 < len(found) <= CHARACTERS_MAX
    assert all(isinstance(one, str) for one in known(name).words(request, slot))
