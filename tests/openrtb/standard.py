"""What the standard asks of a bid response, written from its tables alone: the seller's eye.

OpenRTB 2.6, sections 4.2 and 4.3 (IAB Tech Lab, tag 2.6-202606; Creative Commons Attribution 3.0).
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any
from urllib.parse import urlsplit

MACRO = "${AUCTION_"
_TEXTS = ("adid", "nurl", "burl", "lurl", "adm", "bundle", "iurl", "cid", "crid", "dealid")
_WHOLE = ("w", "h", "dur", "exp", "mtype", "cattax")
_LISTS = {"adomain": str, "cat": str, "attr": int}


def faults(body: Any, request: dict[str, Any] | None = None) -> list[str]:
    """Everything in which a response differs from the standard; a response without bids is none."""
    return list(_faults(body, request))


def bids_of(body: dict[str, Any]) -> list[dict[str, Any]]:
    """All bids of a response."""
    return [bid for seat in body.get("seatbid", []) for bid in seat["bid"]]


def _faults(body: Any, request: dict[str, Any] | None) -> Iterator[str]:
    if not isinstance(body, dict):
        yield "no object"
        return
    if not body.get("seatbid"):
        return
    if not isinstance(body.get("id"), str):
        yield "no id"
    currency = body.get("cur", "USD")
    if request is not None:
        if body.get("id") != request["id"]:
            yield "the id of another request"
        if currency not in request.get("cur", [currency]):
            yield "a currency that was not allowed"
    for seat in body["seatbid"]:
        if not seat.get("bid"):
            yield "a seat without bids"
        for bid in seat.get("bid", []):
            yield from _of_bid(bid, request)


def _of_bid(bid: dict[str, Any], request: dict[str, Any] | None) -> Iterator[str]:
    for name in ("id", "impid"):
        if not isinstance(bid.get(name), str):
            yield f"no {name}"
    price = bid.get("price")
    if isinstance(price, bool) or not isinstance(price, int | float) or price <= 0:
        yield "no price"
    yield from (f"{n} is no text" for n in _TEXTS if not isinstance(bid.get(n, ""), str))
    yield from (f"{n} is not whole" for n in _WHOLE if not isinstance(bid.get(n, 1), int))
    for name, kind in _LISTS.items():
        if not all(isinstance(one, kind) for one in bid.get(name, [])):
            yield f"{name} is no list of its kind"
    for name in ("nurl", "burl", "lurl", "iurl"):
        if name in bid and not _callable(bid[name]):
            yield f"{name} cannot be called"
    if request is not None:
        yield from _against(bid, request)


def _against(bid: dict[str, Any], request: dict[str, Any]) -> Iterator[str]:
    imp = next((one for one in request["imp"] if one["id"] == bid["impid"]), None)
    if imp is None:
        yield "an imp that was not offered"
        return
    market = imp.get("pmp", {})
    deals = {deal["id"] for deal in market.get("deals", [])}
    if "dealid" in bid and bid["dealid"] not in deals:
        yield "a deal that was not offered"
    if market.get("private_auction") and "dealid" not in bid:
        yield "an open bid in a private auction"


def _callable(url: str) -> bool:
    parts = urlsplit(url)
    plain = all("!" <= character <= "~" for character in url)
    return plain and parts.scheme in ("http", "https") and bool(parts.hostname)
