"""Who may buy an imp and on what terms: conditions, blocks, deals, floors, auctions."""

from __future__ import annotations

from typing import Any

import pytest

from service import money
from service.guard.scale import WHOLE
from service.openrtb.floors import BadFloor, cpm, floor_of, multiplier_of
from service.openrtb.offers import Terms, lots
from service.openrtb.requests import BadRequest, NoBid, read
from tests.openrtb.sources import asked, judged, mapped, request

OPEN = (Terms(None, "second", 0, "USD", WHOLE),)
DEAL = {"id": "d1", "bidfloor": 2}


def cpm_terms(deal: str | None, auction: str, floor_cpm: str, currency: str = "USD") -> Terms:
    """Terms with a floor as people write it."""
    return Terms(deal, auction, money.price(floor_cpm), currency, WHOLE)


@pytest.mark.parametrize(
    ("line", "found"),
    [
        ({"when": {"imp.tagid": "a"}}, OPEN),
        ({"when": {"imp.tagid": ["b", "a"]}}, OPEN),
        ({"when": {"imp.tagid": "b"}}, "not_when"),
        ({"when": {"site.domain": "x.example"}}, "not_when"),
        ({"when": {"app.cat": "IAB1"}}, OPEN),
        ({"when": {"app.cat": "IAB2", "imp.tagid": "b"}}, "not_when"),
        ({"when": {"device.devicetype": 4}}, OPEN),
        ({"when": {"device.devicetype": "4"}}, OPEN),
        ({"when": {"imp.instl": True}}, OPEN),
        ({"when": {"imp.instl": False}}, "not_when"),
        ({"unless": {"regs.coppa": 1}}, "unless"),
        ({"unless": {"regs.gdpr": 1}}, "unless"),
        ({"unless": {"app.cat": ["IAB3", "IAB2"]}}, "unless"),
        ({"unless": {"site.domain": "x.example"}}, OPEN),
        ({"when": {"imp.size": "300x250", "imp.type": "banner"}}, OPEN),
    ],
)
def test_conditions_are_kept_to(line: dict[str, Any], found: object) -> None:
    """Text and numbers alike, any of a list, nothing where nothing stands; 2.5 places too."""
    body = request(
        {"tagid": "a", "instl": 1},
        app={"cat": ["IAB1", "IAB2"]},
        device={"devicetype": 4.0},
        regs={"coppa": 1, "ext": {"gdpr": 1}},
    )
    assert judged(line, body) == found


@pytest.mark.parametrize(
    ("line", "changes", "found"),
    [
        ({}, {"badv": ["other.example"]}, OPEN),
        ({}, {"badv": "garden.example"}, "advertiser_blocked"),
        ({}, {"badv": ["den.example"]}, OPEN),
        ({"bundle": "app.one"}, {"bapp": ["app.one"]}, "app_blocked"),
        ({"cat": ["IAB1-2"]}, {"acat": ["IAB1"]}, OPEN),
        ({"cat": ["IAB1-2"]}, {"acat": ["IAB1-2"]}, OPEN),
        ({"cat": ["IAB1"]}, {"acat": ["IAB1-2"]}, "category_not_allowed"),
        ({"cat": ["IAB1-2", "IAB3"]}, {"acat": ["IAB1"]}, "category_not_allowed"),
        ({}, {"acat": ["IAB1"]}, "category_not_allowed"),
        ({"cat": ["IAB11"]}, {"bcat": ["IAB1"]}, OPEN),
        ({"cat": ["53"], "cattax": 7}, {"bcat": ["53"], "cattax": 7}, "category_blocked"),
        ({"cat": ["IAB1"]}, {"bcat": ["53"], "cattax": 7}, "other_taxonomy"),
        ({}, {"bcat": ["53"], "cattax": 7}, OPEN),
        ({"language": "de"}, {"wlang": ["de", "fr"]}, OPEN),
        ({"language": "en"}, {"wlang": ["de", "fr"]}, "language"),
        ({}, {"wlang": ["de"]}, "language"),
    ],
)
def test_what_the_seller_blocks_is_not_bid(
    line: dict[str, Any], changes: dict[str, Any], found: object
) -> None:
    """Advertisers, apps, categories by their taxonomy, languages; what cannot be shown is not."""
    assert judged(line, request(**changes)) == found


@pytest.mark.parametrize(
    ("line", "imp", "found"),
    [
        ({"sizes": ["300x250"]}, {}, OPEN),
        ({"sizes": ["728x90"]}, {}, "size"),
        ({"sizes": ["728x90"]}, {"banner": {"format": [{"w": 728, "h": 90}]}}, OPEN),
        ({"secure": False}, {"secure": 1}, "not_secure"),
        ({"secure": False}, {"secure": 0}, OPEN),
        ({"attr": [3]}, {"banner": {"battr": [3.0]}}, "attribute_blocked"),
        ({"type": "audio"}, {}, "other_type"),
        ({"type": "native"}, {"native": {"request": "{}"}}, OPEN),
        ({"type": "video", "duration_s": 15}, {"video": {"maxduration": 10}}, "duration"),
        ({"type": "video", "duration_s": 15}, {"video": {"minduration": 20}}, "duration"),
        ({"type": "video", "duration_s": 15}, {"video": {"rqddurs": [15, 30]}}, OPEN),
        ({"type": "video", "duration_s": 15}, {"video": {"rqddurs": [30]}}, "duration"),
        ({"type": "video", "duration_s": 15}, {"video": {"maxduration": 0}}, OPEN),
    ],
)
def test_a_creative_must_fit(line: dict[str, Any], imp: dict[str, Any], found: object) -> None:
    """Type, size, security, attributes and duration."""
    assert judged(line, request(imp)) == found


@pytest.mark.parametrize(
    ("line", "market", "found"),
    [
        ({}, {"deals": [DEAL]}, OPEN),
        ({"deals": "any"}, {"deals": [DEAL]}, (cpm_terms("d1", "second", "2"), *OPEN)),
        ({"deals": ["d1"], "open": False}, {"deals": [DEAL]}, (cpm_terms("d1", "second", "2"),)),
        ({"deals": ["d2"], "open": False}, {"deals": [DEAL]}, "no_deal"),
        ({"deals": "any"}, {"deals": [DEAL | {"at": 1}]}, (cpm_terms("d1", "first", "2"), *OPEN)),
        ({"deals": "any"}, {"deals": [DEAL | {"at": 3}]}, (cpm_terms("d1", "fixed", "2"), *OPEN)),
        ({"deals": "any"}, {"deals": [{"id": "d1", "at": 3}]}, OPEN),
        ({"deals": "any"}, {"deals": [DEAL | {"at": 77}]}, OPEN),
        ({"deals": "any"}, {"deals": [DEAL | {"wseat": ["s2"]}]}, OPEN),
        ({"deals": "any"}, {"deals": [DEAL | {"wadomain": ["x.example"]}]}, OPEN),
        (
            {"deals": "any"},
            {"deals": [DEAL | {"bidfloorcur": "eur", "wadomain": ["garden.example"]}]},
            (cpm_terms("d1", "second", "2", "EUR"), *OPEN),
        ),
        ({"deals": "any"}, {"private_auction": 1, "deals": []}, "private_auction"),
        ({"deals": "any"}, {"deals": [None, {"id": 7}, "d1"]}, OPEN),
    ],
)
def test_deals_have_terms_of_their_own(
    line: dict[str, Any], market: dict[str, Any], found: object
) -> None:
    """Their auction, floor and currency override; seats and advertisers bar; at 3 is a price."""
    assert judged(line, request({"pmp": market}), seat="s1") == found


@pytest.mark.parametrize(
    ("place", "media", "duration_s", "floor"),
    [
        ({}, "banner", None, ("0", "USD")),
        ({"bidfloor": 0.1 + 0.2}, "banner", None, ("0.300001", "USD")),
        ({"bidfloor": -1, "bidfloorcur": "EUR"}, "banner", None, ("0", "EUR")),
        ({"bidfloor": 1, "video": {"mincpmpersec": 0.25}}, "video", 15, ("3.75", "USD")),
        ({"bidfloor": 1, "video": {"mincpmpersec": 0.25}}, "banner", None, ("1", "USD")),
        (
            {
                "bidfloor": 1,
                "video": {
                    "durfloors": [
                        {"mindur": 1, "maxdur": 15, "bidfloor": 5},
                        {"mindur": 15, "bidfloor": 7},
                    ]
                },
            },
            "video",
            15,
            ("7", "USD"),
        ),
        ({"bidfloor": 1, "video": {"durfloors": [{"mindur": 60, "bidfloor": 5}]}}, "video", 15,
         ("1", "USD")),
    ],
)  # fmt: skip
def test_the_floor_that_counts(
    place: dict[str, Any], media: str, duration_s: int | None, floor: tuple[str, str]
) -> None:
    """By duration where the seller says so, the highest of ranges that overlap, else the imp's."""
    assert floor_of(place, media, None, duration_s) == (money.price(floor[0]), floor[1])


@pytest.mark.parametrize(
    "imp",
    [
        {"bidfloor": "cheap"},
        {"bidfloor": True},
        {"bidfloor": 1e300},
        {"bidfloor": 10**30},
        {"bidfloorcur": 7},
        {"bidfloorcur": "EURO"},
        {"qty": {"multiplier": 0}},
        {"qty": {"multiplier": -1}},
        {"qty": {"multiplier": 1e-300}},
        {"qty": {"multiplier": 10**9}},
        {"qty": {"multiplier": "many"}},
        {"banner": None, "video": {"mincpmpersec": 1}},
    ],
)
def test_a_floor_that_cannot_be_read_is_not_bid_under(imp: dict[str, Any]) -> None:
    """One imp is left alone; nobody guesses what its seller meant."""
    line = {"type": "video"} if "video" in imp else {}
    assert judged(line, request(imp)) == "floor_unreadable"


def test_a_tiny_floor_rounds_up() -> None:
    """A bid at what is left of it after rounding would be below it."""
    assert (cpm(1e-7), cpm(0), cpm(None)) == (1, 0, 0)
    with pytest.raises(BadFloor):
        cpm([1])
    assert multiplier_of({"qty": 7}) == multiplier_of({}) == WHOLE


@pytest.mark.parametrize(
    ("kind", "auction"),
    [
        (None, "second"),
        (1, "first"),
        (1.0, "first"),
        (2, "second"),
        (500, "first"),
        (501, None),
        (3, None),
        (0, None),
        (-1, None),
        (1.5, None),
        (True, None),
        ("1", None),
        ([1], None),
    ],
)
def test_kinds_of_auction(kind: object, auction: str | None) -> None:
    """Those of the standard, those an exchange has told us, and no guess about any other."""
    body = request() if kind is None else request(at=kind)
    found = judged({}, body, private_auctions={"500": "first"})
    assert found == ((cpm_terms(None, auction, "0"),) if auction else "auction_unknown")


def test_line_items_on_the_same_terms_compete() -> None:
    """One lot for each terms, deals first, and of one line item's creatives the first that fits."""
    source = mapped(
        {"line_item": "a", "crid": "1", "sizes": ["728x90"]},
        {"line_item": "a", "crid": "2"},
        {"line_item": "a", "crid": "3"},
        {"line_item": "b", "deals": "any"},
    )
    found = asked(request({"pmp": {"deals": [DEAL]}}), source)
    ways = lots(found.imps[0], found, source)
    assert [(terms.deal, list(lines)) for terms, lines in ways] == [
        *(("d1", ["b"]), (None, ["a", "b"])),
    ]
    assert ways[1][1]["a"].crid == "2"


@pytest.mark.parametrize(
    ("changes", "reason", "code"),
    [
        ({"wseat": ["s2"]}, "seat_not_allowed", None),
        ({"bseat": ["s1"]}, "seat_not_allowed", None),
        ({"tmax": 20}, "no_time", 15),
        ({"tmax": 0}, "no_time", 15),
        ({"tmax": -5}, "no_time", 15),
        ({"cur": ["money"]}, "no_currency", None),
        ({"cur": [7]}, "no_currency", None),
    ],
)
def test_a_request_nobody_can_serve(changes: dict[str, Any], reason: str, code: int | None) -> None:
    """Seats, time and currencies decide for the whole request."""
    assert read(request(**changes), mapped(seat="s1")) == NoBid("r1", reason, code)


@pytest.mark.parametrize(
    ("changes", "currencies", "deadline_ms", "test"),
    [
        ({}, ("USD",), None, False),
        ({"cur": []}, ("USD",), None, False),
        ({"cur": ["eur", "USD", "eur"]}, ("EUR", "USD"), None, False),
        ({"cur": "GBP"}, ("GBP",), None, False),
        ({"tmax": 120}, ("USD",), 100, False),
        ({"tmax": 120.9, "test": 1}, ("USD",), 100, True),
        ({"tmax": "soon", "test": 0}, ("USD",), None, False),
        ({"tmax": 1e300, "test": "yes"}, ("USD",), 59_980, True),
        ({"wseat": ["s1", "s2"], "bseat": ["s3"]}, ("USD",), None, False),
    ],
)
def test_what_holds_for_the_whole_request(
    changes: dict[str, Any], currencies: tuple[str, ...], deadline_ms: int | None, test: bool
) -> None:
    """Currencies in the seller's order, time less the margin, and a test unless it says no."""
    found = asked(request(**changes), mapped(seat="s1"))
    assert (found.currencies, found.deadline_ms, found.test) == (currencies, deadline_ms, test)


@pytest.mark.parametrize(
    "body",
    [
        None,
        [],
        "text",
        7,
        {},
        {"id": "r1"},
        {"id": 7, "imp": [{"id": "1"}]},
        {"id": "", "imp": [{"id": "1"}]},
        {"id": "r" * 257, "imp": [{"id": "1"}]},
        {"id": "r1", "imp": []},
        {"id": "r1", "imp": {}},
        {"id": "r1", "imp": [{"id": "1"}] * 101},
        {"id": "r1", "imp": [None, {}, {"id": 7}]},
    ],
)
def test_what_is_no_bid_request(body: object) -> None:
    """No object, no id, no imp with one, or more imps than anybody sells at once."""
    with pytest.raises(BadRequest):
        read(body, mapped())


def test_an_imp_without_an_id_of_its_own_is_left_alone() -> None:
    """The others are priced; of two with one id only the first is."""
    imps = [{"id": "1", "tagid": "a"}, {"id": "1", "tagid": "b"}, {}, {"id": "2"}]
    found = asked({"id": "r1", "imp": imps})
    assert [imp.get("tagid") for imp in found.imps] == ["a", None]
