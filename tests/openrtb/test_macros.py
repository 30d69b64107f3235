"""Notices: what was said, what is unknown, what is an audit, and what is a broken source."""

from __future__ import annotations

from urllib.parse import parse_qs, urlsplit

import pytest

from service import money
from service.openrtb import codes, macros
from service.openrtb.macros import Heard, Unheard, hear, notice_url, told
from tests.openrtb.sources import mapped


@pytest.mark.parametrize(
    ("text", "state"),
    [
        (None, "unknown"),
        ("", "unknown"),
        (" ", "unknown"),
        ("AUDIT", "audit"),
        ("${AUCTION_PRICE}", "unreplaced"),
        ("%24%7BAUCTION_PRICE%7D", "unreplaced"),
        ("${AUCTION PRICE:B64}", "unreplaced"),
        ("0", "said"),
        ("audit", "said"),
    ],
)
def test_three_ways_to_say_nothing_are_told_apart(text: str | None, state: str) -> None:
    """Empty, AUDIT and unreplaced are three things, and none of them is a price."""
    assert told(text)[0] == state


@pytest.mark.parametrize(
    ("kind", "said", "heard"),
    [
        ("win", {"price": "0.91"}, Heard("won", money.price("0.91"))),
        ("win", {"price": "9.1e-1"}, Heard("won", money.price("0.91"))),
        ("win", {"price64": "MC45MQ=="}, Heard("won", money.price("0.91"))),
        ("win", {"price64": "MC45MQ"}, Heard("won", money.price("0.91"))),
        ("win", {"price": "0.0000005"}, Heard("won", 0)),
        ("win", {}, Heard("won", at_the_bid=True)),
        ("win", {"price": ""}, Heard("won", at_the_bid=True)),
        (
            "win",
            {"price": "1", "cur": "USD", "min": "0.90", "qty": "2.5"},
            Heard("won", 10**6, 900_000, "USD", 2_500_000_000),
        ),
        # What a sender of 2.5 does not know it leaves as it is.
        (
            "win",
            {"price": "1", "cur": "", "min": "${AUCTION_MIN_TO_WIN}", "qty": "${X}"},
            Heard("won", 10**6),
        ),
        ("win", {"price": "1", "min": "soon", "qty": "0", "cur": "money"}, Heard("won", 10**6)),
        ("billed", {"price": "1"}, Heard("billed", 10**6)),
        ("billed", {}, Heard("billed", at_the_bid=True)),
        ("win", {"price": "${AUCTION_PRICE}"}, Unheard("price_unreplaced")),
        ("billed", {"price64": "${AUCTION_PRICE:B64}"}, Unheard("price_unreplaced")),
        ("win", {"price": "cheap"}, Unheard("price_unreadable")),
        ("win", {"price": "-1"}, Unheard("price_unreadable")),
        ("win", {"price": "NaN"}, Unheard("price_unreadable")),
        ("win", {"price": "1e99"}, Unheard("price_unreadable")),
        ("win", {"price": "9" * 500}, Unheard("price_unreadable")),
        ("win", {"price": "0x10"}, Unheard("price_unreadable")),
        ("win", {"price64": "!"}, Unheard("price_unreadable")),
        ("win", {"price64": "YQ"}, Unheard("price_unreadable")),
        ("win", {"price": "AUDIT"}, Unheard("audit")),
        ("win", {"price": "1", "min": "AUDIT"}, Unheard("audit")),
        ("loss", {"reason": "AUDIT"}, Unheard("audit")),
        ("loss", {"reason": "0"}, Unheard("loss_says_won")),
        ("loss", {"reason": "102", "min": "1.00"}, Heard("lost", to_win=10**6)),
        ("loss", {"reason": "102"}, Heard("lost")),
        ("loss", {"reason": "202", "min": "1.00"}, Heard("void", why="202 creative disapproved")),
        ("loss", {"reason": "600"}, Heard("void", why="600 private to the exchange")),
        ("loss", {"reason": "16"}, Heard("void", why="16 unknown")),
        ("loss", {}, Heard("void", why="reason unknown")),
        ("loss", {"reason": "${AUCTION_LOSS}"}, Heard("void", why="reason unknown")),
        ("loss", {"reason": "price", "min": "1"}, Heard("void", why="reason unknown")),
    ],
)  # fmt: skip
def test_notices_are_heard(kind: str, said: dict[str, str], heard: object) -> None:
    """Each as what it says and no more; without a price the bid is the most it can be."""
    assert hear(kind, said) == heard


@pytest.mark.parametrize("code", sorted(codes.LOSS))
def test_only_four_reasons_say_something_about_price(code: int) -> None:
    """Below a floor or beaten; a creative that was filtered must never teach to bid more."""
    heard = hear("loss", {"reason": str(code)})
    kind = heard.kind if isinstance(heard, Heard) else None
    expected = "lost" if code in (100, 101, 102, 103) else "void"
    assert kind == (None if code == 0 else expected)


def test_an_old_list_shifts_nothing_that_teaches() -> None:
    """Before an erratum of April 2021 the codes 206 to 212 stood one lower: all of them voids."""
    assert not codes.PRICED & set(range(200, 216))


@pytest.mark.parametrize("kind", ["win", "billed", "loss"])
def test_an_address_carries_the_ticket_and_every_macro(kind: str) -> None:
    """Plain text replacement gives an address that is read back as what was put in."""
    url = notice_url(mapped(), kind, "a-ticket")
    values = {
        "AUCTION_PRICE": "0.91",
        "AUCTION_CURRENCY": "USD",
        "AUCTION_MIN_TO_WIN": "0.90",
        "AUCTION_MULTIPLIER": "1",
        "AUCTION_LOSS": "102",
    }
    for name, value in values.items():
        url = url.replace(f"${{{name}}}", value)
    parts = urlsplit(url)
    assert (parts.netloc, parts.path) == ("bids.example", f"/openrtb/{kind}/a-ticket")
    said = {name: value[0] for name, value in parse_qs(parts.query).items()}
    to_win = None if kind == "billed" else 900_000
    told_price = None if kind == "loss" else 910_000
    delivered = None if kind == "loss" else 10**9
    names = {"win": "won", "billed": "billed", "loss": "lost"}
    assert hear(kind, said) == Heard(names[kind], told_price, to_win, "USD", delivered)


def test_a_price_may_come_encoded() -> None:
    """By agreement, with the suffix of the macro that the standard gives as its example."""
    assert "price64=${AUCTION_PRICE:B64}" in notice_url(mapped(price_form="base64"), "win", "t")


def test_the_lists_name_what_they_should() -> None:
    """The codes that we send and hear are those of the published lists."""
    assert codes.NO_BID[codes.INVALID_REQUEST] == "invalid request"
    assert codes.NO_BID[codes.NO_TIME] == "insufficient auction time"
    assert codes.LOSS[codes.WON] == "bid won"
    assert (len(codes.NO_BID), len(codes.LOSS)) == (18, 32)
    assert macros.TEXT_MAX < 1000
