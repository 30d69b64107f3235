"""What a seller lets in, rule by rule, and which word is said where several stand against it."""

from __future__ import annotations

from typing import Any

import pytest

from service.openrtb.blocks import size_of, unfit
from tests.openrtb.sources import line_of

BANNER: dict[str, Any] = {"banner": {"w": 300, "h": 250}}


@pytest.mark.parametrize(
    ("domains", "blocked", "found"),
    [
        ([], ["garden.example"], None),
        (["garden.example"], [], None),
        (["garden.example"], ["garden.example"], "advertiser_blocked"),
        (["Garden.Example"], ["gARDEN.eXAMPLE"], "advertiser_blocked"),
        (["shop.garden.example"], ["garden.example"], "advertiser_blocked"),
        (["a.b.garden.example"], ["garden.example"], "advertiser_blocked"),
        (["evergarden.example"], ["garden.example"], None),
        (["garden.example"], ["shop.garden.example"], None),
        (["one.example", "two.example"], ["two.example"], "advertiser_blocked"),
        (["garden.example"], "garden.example", "advertiser_blocked"),
        (["garden.example"], [7, None, {}], None),
        (["garden.example"], {"garden.example": 1}, None),
    ],
)
def test_a_blocked_domain_blocks_what_lies_below_it(
    domains: list[str], blocked: object, found: str | None
) -> None:
    """And nothing else: a name that only ends alike is another's, a parent is wider."""
    assert unfit(line_of(adomain=domains), BANNER, {"badv": blocked}) == found


@pytest.mark.parametrize(
    ("own", "allowed", "blocked", "found"),
    [
        ([], [], [], None),
        (["IAB25"], [], ["IAB25"], "category_blocked"),
        (["IAB25-3"], [], ["IAB25"], "category_blocked"),
        (["IAB25"], [], ["IAB25-3"], None),
        (["IAB2"], [], ["IAB25"], None),
        (["IAB1", "IAB25"], [], ["IAB25"], "category_blocked"),
        ([], ["IAB1"], [], "category_not_allowed"),
        (["IAB1"], ["IAB1"], [], None),
        (["IAB1-2"], ["IAB1"], [], None),
        (["IAB1", "IAB2"], ["IAB1"], [], "category_not_allowed"),
        (["IAB1"], ["IAB1"], ["IAB1"], "category_blocked"),
    ],
)
def test_categories_are_kept_to_with_all_they_hold(
    own: list[str], allowed: list[str], blocked: list[str], found: str | None
) -> None:
    """A part of a blocked category is blocked, and every category must be allowed."""
    body = {"acat": allowed, "bcat": blocked}
    assert unfit(line_of(cat=own), BANNER, body) == found


@pytest.mark.parametrize(
    ("taxonomy", "found"),
    [(None, None), (1, None), (1.0, None), ("1", None), (7, "other_taxonomy"), (True, None)],
)
def test_codes_of_two_taxonomies_are_never_compared(taxonomy: object, found: str | None) -> None:
    """A list that could not be kept to leaves the imp alone; the first taxonomy is the usual."""
    body = {"bcat": ["IAB9"], "cattax": taxonomy}
    assert unfit(line_of(cat=["IAB1"], cattax=1), BANNER, body) == found


@pytest.mark.parametrize(
    ("place", "fits"),
    [
        ({}, True),
        ({"minduration": 15}, True),
        ({"minduration": 16}, False),
        ({"maxduration": 15}, True),
        ({"maxduration": 14}, False),
        ({"maxduration": 0}, True),
        ({"maxduration": -1}, True),
        ({"minduration": 5, "maxduration": 30}, True),
        ({"minduration": "16", "maxduration": None}, True),
        ({"minduration": True}, True),
        ({"rqddurs": [15]}, True),
        ({"rqddurs": [15.0, 30]}, True),
        ({"rqddurs": [30, 60]}, False),
        ({"rqddurs": [], "maxduration": 10}, False),
        ({"rqddurs": [15], "maxduration": 10}, True),
        ({"rqddurs": ["15", None, True], "maxduration": 20}, True),
    ],
)
def test_a_creative_of_fifteen_seconds_keeps_to_the_time(place: dict[str, Any], fits: bool) -> None:
    """Exact durations come before ranges; a limit of nothing is no limit."""
    line = line_of(type="video", duration_s=15)
    assert unfit(line, {"video": place}, {}) == (None if fits else "duration")


@pytest.mark.parametrize(
    ("secure", "found"),
    [(1, "not_secure"), ("1", "not_secure"), (True, "not_secure"), (0, None), (None, None)],
)
def test_an_open_creative_is_not_shown_on_a_secure_page(secure: object, found: str | None) -> None:
    """However the seller writes yes; a secure creative fits everywhere."""
    imp = {**BANNER, "secure": secure}
    assert unfit(line_of(secure=False), imp, {}) == found
    assert unfit(line_of(secure=True), imp, {}) is None


@pytest.mark.parametrize(
    ("allowed", "barred", "language", "found"),
    [
        ([], [], None, None),
        (["de"], [], "de", None),
        (["de"], [], "fr", "language"),
        (["de"], [], None, "language"),
        ([], ["de-CH"], "de-CH", None),
        (["de"], ["de-CH"], "de-CH", None),
        ("de", [], "de", None),
    ],
)
def test_either_list_of_languages_lets_a_creative_in(
    allowed: object, barred: object, language: str | None, found: str | None
) -> None:
    """The two lists are two ways to write languages, and a creative without one fits neither."""
    body = {"wlang": allowed, "wlangb": barred}
    assert unfit(line_of(language=language), BANNER, body) == found


@pytest.mark.parametrize(
    ("bundle", "blocked", "found"),
    [
        (None, ["app.one"], None),
        ("app.one", ["app.one"], "app_blocked"),
        ("app.one", "app.one", "app_blocked"),
        ("app.one", ["app.one.more"], None),
        ("app.one", [1], None),
    ],
)
def test_a_blocked_app_is_not_advertised(
    bundle: str | None, blocked: object, found: str | None
) -> None:
    """By its whole name only."""
    assert unfit(line_of(bundle=bundle), BANNER, {"bapp": blocked}) == found


@pytest.mark.parametrize(
    ("attributes", "barred", "found"),
    [
        ([1, 2], [3], None),
        ([1, 2], [2], "attribute_blocked"),
        ([1], [1.0], "attribute_blocked"),
        ([1], [1.5], None),
        ([1], ["1"], None),
        ([1], [True], None),
        ([1], 1, None),
        ([], [1], None),
    ],
)
def test_a_barred_attribute_bars_the_creative(
    attributes: list[int], barred: object, found: str | None
) -> None:
    """Numbers are compared as numbers, and what is none bars nothing."""
    imp = {"banner": {"battr": barred}}
    assert unfit(line_of(attr=attributes), imp, {}) == found


def test_the_sellers_first_wish_of_a_size_is_taken() -> None:
    """Of two sizes that fit, the one that the seller names first."""
    formats = [{"w": 728, "h": 90}, {"w": 160, "h": 600}, {"w": 300, "h": 250}]
    imp = {"banner": {"format": formats}}
    assert size_of(line_of(sizes=["300x250", "160x600"]), imp) == "160x600"
    assert size_of(line_of(sizes=["970x250"]), imp) is None
    assert size_of(line_of(), imp) is None


def test_the_form_is_judged_before_the_advertiser_and_that_before_categories() -> None:
    """One word is said, and always the same one."""
    line = line_of(type="banner", cat=["IAB1"], sizes=["1x1"])
    body = {"badv": ["garden.example"], "bcat": ["IAB1"]}
    assert unfit(line, BANNER, body) == "size"
    assert unfit(line_of(cat=["IAB1"]), BANNER, body) == "advertiser_blocked"
    assert unfit(line_of(cat=["IAB1"]), BANNER, {"bcat": ["IAB1"]}) == "category_blocked"


@pytest.mark.parametrize("place", [None, [], "banner", 1, True])
def test_a_medium_that_is_no_object_is_not_offered(place: object) -> None:
    """Whatever stands there instead."""
    assert unfit(line_of(), {"banner": place}, {}) == "other_type"
