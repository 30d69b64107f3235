"""The bytes that are posted: amounts, prices and moments as people write them, and their proof."""

from __future__ import annotations

import hashlib
import hmac
import json
from typing import Any

import pytest

from service.posting import proof, written
from service.store.outbox import News

SECRET = b"an invented secret of some length"


def news(body: dict[str, Any], line_item: str = "garden", tries: int = 0) -> News:
    """One piece of news of the year 2026."""
    return News(7, "ab" * 16, "finding", line_item, body, 1_767_225_600_001, tries, 5)


def said(body: dict[str, Any]) -> dict[str, Any]:
    """What is posted of a body, without what every news has."""
    content = json.loads(written(news(body)))
    frame = ("id", "kind", "line_item", "at")
    return {name: value for name, value in content.items() if name not in frame}


def test_the_frame_names_what_who_and_when() -> None:
    """To the millisecond, in UTC; its number and its tries are nobody's business."""
    assert json.loads(written(news({}))) == {
        "id": "ab" * 16, "kind": "finding", "line_item": "garden",
        "at": "2026-01-01T00:00:00.001Z",
    }  # fmt: skip


def test_news_of_all_line_items_names_none() -> None:
    """The star is ours; a receiver reads null."""
    assert json.loads(written(news({}, "*")))["line_item"] is None


@pytest.mark.parametrize(
    ("body", "wanted"),
    [
        ({"spent_nanos": 2_500_000_000}, {"spent": "2.50"}),
        ({"spent_nanos": -1}, {"spent": "-0.000000001"}),
        ({"mean_price_cpm_nanos": 1_250_000}, {"mean_price_cpm": 1.25}),
        ({"raised_ms": 0}, {"raised_at": "1970-01-01T00:00:00.000Z"}),
        ({"since_ms": 1000}, {"since": "1970-01-01T00:00:01.000Z"}),
        ({"numbers": {"paid_nanos": 10**9, "deep": {"at_ms": 1}}},
         {"numbers": {"paid": "1.00", "deep": {"at_at": "1970-01-01T00:00:00.001Z"}}}),
        ({"share": 0.5, "wins": 3, "rule": "voids", "none": None},
         {"share": 0.5, "wins": 3, "rule": "voids", "none": None}),
    ],
)  # fmt: skip
def test_members_are_written_for_people(body: dict[str, Any], wanted: dict[str, Any]) -> None:
    """Nanos as decimal text, prices as CPM, moments as times; all else as it is, at any depth."""
    assert said(body) == wanted


def test_every_try_posts_the_same_bytes() -> None:
    """Whatever the order of members, so that a receiver may compare digests."""
    one = written(news({"a": 1, "b": {"d": 1, "c": 2}}))
    assert written(news({"b": {"c": 2, "d": 1}, "a": 1}, tries=9)) == one
    assert b" " not in one


def test_text_beyond_ascii_arrives_whole() -> None:
    """Escaped on the way, the same when read."""
    body = written(news({"saw": "80 % – zwölf\u2028"}))
    assert body.isascii()
    assert json.loads(body)["saw"] == "80 % – zwölf\u2028"


def test_a_proof_is_plain_hmac_over_time_and_body() -> None:
    """So that a receiver in any language makes it in two lines."""
    wanted = hmac.new(SECRET, b"1767225600\n{}", hashlib.sha256).hexdigest()
    assert proof(SECRET, "1767225600", b"{}") == wanted
    assert len(wanted) == 64


@pytest.mark.parametrize(
    ("secret", "stamp", "body"),
    [
        (SECRET[:-1], "1", b"{}"),
        (SECRET, "2", b"{}"),
        (SECRET, "1", b"{ }"),
        (SECRET, "", b"1\n{}"),
    ],
)
def test_another_secret_time_or_body_has_another_proof(
    secret: bytes, stamp: str, body: bytes
) -> None:
    """Nor can time and body be shifted against each other."""
    assert proof(secret, stamp, body) != proof(SECRET, "1", b"{}")
