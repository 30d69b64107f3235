"""What comes back in place of a macro: said, unknown, a rendering for audit, or left unreplaced."""

from __future__ import annotations

import base64
import binascii
import re
from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal
from urllib.parse import unquote

from service import money
from service.openrtb import codes
from service.openrtb.mapping import Source

UNKNOWN, AUDIT, UNREPLACED, SAID = "unknown", "audit", "unreplaced", "said"
TEXT_MAX = 128

_NUMBER = re.compile(r"[0-9]{1,18}(\.[0-9]{1,30})?([eE][+-]?[0-9]{1,2})?")
_CODE = re.compile(r"[0-9]{1,6}")
_CURRENCY = re.compile(r"[A-Z]{3}")

_PLAIN, _ENCODED = "price=${AUCTION_PRICE}", "price64=${AUCTION_PRICE:B64}"
_TOLD = "cur=${AUCTION_CURRENCY}&min=${AUCTION_MIN_TO_WIN}"
_QUERIES = {
    "win": f"{_TOLD}&qty=${{AUCTION_MULTIPLIER}}",
    "billed": "cur=${AUCTION_CURRENCY}&qty=${AUCTION_MULTIPLIER}",
    "loss": f"reason=${{AUCTION_LOSS}}&{_TOLD}",
}


@dataclass(frozen=True, slots=True)
class Heard:
    """An outcome that a notice tells; prices in nanos per impression of the bid's currency."""

    kind: str
    clearing: int | None = None
    to_win: int | None = None
    currency: str | None = None
    delivered: int | None = None
    why: str | None = None
    at_the_bid: bool = False


@dataclass(frozen=True, slots=True)
class Unheard:
    """Why a notice tells nothing that could be booked; the hold stays as it is."""

    reason: str


def notice_url(source: Source, kind: str, ticket: str) -> str:
    """The address of a notice: the ticket is ours and signed, what comes by macros is neither."""
    price = _ENCODED if source.price_form == "base64" else _PLAIN
    told = _QUERIES[kind] if kind == "loss" else f"{price}&{_QUERIES[kind]}"
    return f"{source.notice_url}/openrtb/{kind}/{ticket}?{told}"


def told(text: str | None) -> tuple[str, str]:
    """Which of the four a parameter is, and its text where it is said."""
    stripped = (text or "").strip()
    if not stripped:
        return UNKNOWN, ""
    if stripped == "AUDIT":
        return AUDIT, ""
    # Some encode the address before they replace, and then replace nothing.
    if "${" in stripped or "${" in unquote(stripped):
        return UNREPLACED, ""
    return SAID, stripped[: TEXT_MAX + 1]


def hear(kind: str, parameters: Mapping[str, str]) -> Heard | Unheard:
    """
    Read a notice of the kind `win`, `billed` or `loss`.

    A macro that the sender's version does not know stays unreplaced; for all but the price that
    is the same as unknown. A price unreplaced is a broken source: nothing is booked by it.
    """
    read = {name: told(parameters.get(name)) for name in ("price", "price64", *_OPTIONAL)}
    if any(state == AUDIT for state, _ in read.values()):
        return Unheard(AUDIT)
    said = {name: text for name, (state, text) in read.items() if state == SAID}
    to_win, currency = _cpm(said.get("min")), said.get("cur", "")
    if not _CURRENCY.fullmatch(currency):
        currency = ""
    if kind == "loss":
        return _lost(said.get("reason", ""), to_win, currency or None)
    if UNREPLACED in (read["price"][0], read["price64"][0]):
        return Unheard("price_unreplaced")
    text = said.get("price") or _decoded(said.get("price64"))
    price = None if text is None else _cpm(text)
    if text is not None and price is None:
        return Unheard("price_unreadable")
    delivered = _count(said.get("qty"))
    booked = "won" if kind == "win" else "billed"
    unknown = price is None
    return Heard(booked, price, to_win, currency or None, delivered, at_the_bid=unknown)


_OPTIONAL = ("cur", "min", "qty", "reason")


def _lost(reason: str, to_win: int | None, currency: str | None) -> Heard | Unheard:
    if not _CODE.fullmatch(reason):
        # Lost for a reason nobody told: to take it for a price would teach what is not so.
        return Heard("void", why="reason unknown")
    code = int(reason)
    if code == codes.WON:
        return Unheard("loss_says_won")
    if code in codes.PRICED:
        return Heard("lost", to_win=to_win, currency=currency)
    return Heard("void", why=codes.loss_words(code))


def _decoded(text: str | None) -> str | None:
    """Out of base64; what is not of it comes back as it is, and is no price."""
    if text is None:
        return None
    try:
        padded = text + "=" * (-len(text) % 4)
        return base64.b64decode(padded, altchars=b"-_", validate=True).decode("ascii")
    except (binascii.Error, ValueError):
        return "?"


def _cpm(text: str | None) -> int | None:
    if text is None or not _NUMBER.fullmatch(text):
        return None
    try:
        return money.price(Decimal(text), money.HALF_EVEN)
    except money.NotMoney:
        return None


def _count(text: str | None) -> int | None:
    if text is None or not _NUMBER.fullmatch(text):
        return None
    try:
        return money.nanos_rounded(Decimal(text), money.HALF_EVEN) or None
    except money.NotMoney:
        return None
