"""The mapping: checked whole, with its places, and unable to name what leads to a person."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from service.errors import Unsafe
from service.openrtb import mapping
from service.openrtb.paths import ALLOWED, OLDER, path
from tests.openrtb.published import APP, VIDEO
from tests.openrtb.sources import LINE, SOURCE

WHOLE: dict[str, Any] = {"sources": {"north": SOURCE | {"line_items": [LINE]}}}


def spoilt(**changes: Any) -> dict[str, Any]:
    """The mapping with a change of its source."""
    return {"sources": {"north": SOURCE | {"line_items": [LINE]} | changes}}


@pytest.mark.parametrize("name", ["map.json", "map.toml"])
def test_a_mapping_is_read_from_json_and_toml(tmp_path: Path, name: str) -> None:
    """Both give the same."""
    toml = """
[sources.north]
notice_url = "https://bids.example"
features = {device = "device.devicetype", tag = "imp.tagid"}
[[sources.north.line_items]]
line_item = "garden"
type = "banner"
adomain = ["garden.example"]
crid = "creative-1"
"""
    file = tmp_path / name
    file.write_text(toml if file.suffix == ".toml" else json.dumps(WHOLE), "utf-8")
    assert mapping.load(file) == mapping.read(WHOLE)


@pytest.mark.parametrize(
    ("members", "sentence"),
    [
        ([], "the file: "),
        ({}, "sources: field required"),
        ({"sources": {}}, "sources: "),
        ({"sources": {"win": SOURCE | {"line_items": [LINE]}}}, "sources.win: not a name"),
        ({"sources": {"a b": SOURCE | {"line_items": [LINE]}}}, "sources.a b: not a name"),
        (spoilt(surprise=1), "sources.north.surprise: there is no such field."),
        (spoilt(notice_url="ftp://bids.example"), "sources.north.notice_url: not an http"),
        (spoilt(notice_url="https://bids.example/"), "sources.north.notice_url: not an http"),
        (spoilt(features={"a": "user.id"}), "sources.north.features.a: a request's field that"),
        (spoilt(features={"a": 7}), "sources.north.features.a: "),
        (spoilt(margin_ms=-1), "sources.north.margin_ms: "),
        (spoilt(margin_ms="20"), "sources.north.margin_ms: "),
        (spoilt(currencies=["euro"]), "sources.north.currencies.0: "),
        (spoilt(private_auctions={"3": "first"}), "sources.north.private_auctions.3: "),
        (spoilt(other_reason=15), "sources.north.other_reason: "),
        (spoilt(line_items=[]), "sources.north.line_items: "),
        (spoilt(line_items=[LINE | {"line_item": "a b"}]), "line_items.0.line_item: "),
        (spoilt(line_items=[LINE | {"type": "poster"}]), "line_items.0.type: "),
        (spoilt(line_items=[LINE | {"when": {"user.yob": 1990}}]), "when.user.yob: a request's"),
        (spoilt(line_items=[LINE | {"when": {"imp.tagid": []}}]), "when.imp.tagid: not a text"),
        (spoilt(line_items=[LINE | {"when": {"imp.tagid": None}}]), "when.imp.tagid: not a text"),
        (spoilt(line_items=[LINE | {"sizes": ["300"]}]), "line_items.0.sizes.0: "),
    ],
)
def test_a_fault_is_told_with_its_place(members: object, sentence: str) -> None:
    """At the start, and for all faults at once; nothing is guessed."""
    with pytest.raises(Unsafe, match=r"The OpenRTB mapping is not usable") as told:
        mapping.read(members)
    assert sentence in str(told.value)


def test_all_faults_are_told_at_once() -> None:
    """Whoever mends one need not start again to hear of the next."""
    with pytest.raises(Unsafe) as told:
        mapping.read(spoilt(margin_ms=-1, seat=7, line_items=[LINE | {"open": "yes"}]))
    assert all(name in str(told.value) for name in ("margin_ms", "seat", "line_items.0.open"))


@pytest.mark.parametrize(
    ("name", "raw", "sentence"),
    [
        ("no.json", None, "cannot be read"),
        ("a.json", b"{", "not JSON"),
        ("a.json", b"\xff", "not JSON"),
        ("a.json", b"[" * 100_000, "not JSON"),
        ("a.toml", b"= 1", "not TOML"),
        ("a.json", b" " * (mapping.BYTES_MAX + 1), "longer than"),
    ],
)
def test_a_file_that_is_none_is_told(
    tmp_path: Path, name: str, raw: bytes | None, sentence: str
) -> None:
    """Missing, broken, of another coding or without an end."""
    if raw is not None:
        (tmp_path / name).write_bytes(raw)
    with pytest.raises(Unsafe, match=sentence):
        mapping.load(tmp_path / name)


PERSONAL = (
    *("user", "user.id", "user.buyeruid", "user.yob", "user.gender", "user.keywords", "user.data"),
    *("user.eids", "user.ext.eids", "user.consent", "user.ext.consent", "user.geo.zip"),
    *("device.ifa", "device.ip", "device.ipv6", "device.ua", "device.sua", "device.geo"),
    *("device.geo.lat", "device.geo.lon", "device.geo.zip", "device.geo.city"),
    *("device.didsha1", "device.dpidmd5", "device.macsha1", "device.ext.ifa", "device.hwv"),
    *("site.page", "site.ref", "site.search", "site.keywords", "site.ext.user", "app.keywords"),
    *("regs.gpp", "regs.us_privacy", "regs.ext", "imp.ext", "ext", "source.tid", "source.ext"),
    *("id", "imp.id", "imp", "site", "imp.metric", "imp.metric.", "imp.metric.a.b", "", "."),
)


@pytest.mark.parametrize("name", PERSONAL)
def test_what_leads_to_a_person_cannot_be_named(name: str) -> None:
    """No person, device, address, fine place, consent text, page or private part."""
    assert path(name) is None


def test_every_allowed_path_is_harmless_by_its_words() -> None:
    """A word that names a person or a device would be seen here, whoever adds it."""
    words = {word for name in ALLOWED for word in name.split(".")}
    harm = {
        *("user", "ifa", "ip", "ipv6", "ua", "lat", "lon", "zip", "city", "ext", "buyeruid"),
        *("eids", "consent", "page", "ref", "search", "keywords", "yob", "gender", "gpp"),
    }
    assert words & harm == set()
    assert OLDER.keys() <= ALLOWED.keys()


@pytest.mark.parametrize(
    ("name", "body", "feature"),
    [
        ("device.devicetype", APP, "1"),
        ("device.connectiontype", APP, "3"),
        ("device.dnt", APP, False),
        ("device.geo.metro", APP, "803"),
        ("app.cat", APP, "IAB15"),
        ("imp.size", APP, "728x90"),
        ("imp.type", VIDEO, "video"),
        ("imp.video.maxduration", VIDEO, 30),
        ("imp.video.startdelay", VIDEO, "0"),
        ("imp.metric.viewability", {"imp": [{"metric": [{"type": "x"}]}]}, None),
        (
            "imp.metric.viewability",
            {"imp": [{"metric": [7, {"type": "viewability", "value": 0.85}]}]},
            0.85,
        ),
        ("regs.gdpr", {"regs": {"gdpr": 0, "ext": {"gdpr": 1}}}, False),
        ("regs.gdpr", {"regs": {"ext": {"gdpr": 1}}}, True),
        ("source.schain.complete", {"source": {"ext": {"schain": {"complete": 1}}}}, True),
        ("site.domain", {"site": {"domain": "x" * 65}}, None),
        ("site.domain", {"site": {"domain": "a\nb"}}, None),
        ("site.domain", {"site": {"domain": ["a.example", "b.example"]}}, "a.example"),
        ("site.domain", {"site": {"domain": {"a": 1}}}, None),
        ("site.domain", {"site": 7}, None),
        ("site.cat", {"site": {"cat": []}}, None),
        ("imp.exp", {"imp": [{"exp": "soon"}]}, None),
        ("imp.exp", {"imp": [{"exp": True}]}, None),
        ("imp.exp", {"imp": [{"exp": 10**300}]}, None),
    ],
)
def test_what_stands_in_a_request_becomes_a_feature(
    name: str, body: dict[str, Any], feature: object
) -> None:
    """Codes are names, flags truths, numbers numbers; what is of no use as one is missing."""
    found = path(name)
    assert found is not None
    assert found.feature(body, body.get("imp", [{}])[0]) == feature
