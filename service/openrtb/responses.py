"""Our bids as the standard writes them; only what is known is written."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from service import money
from service.openrtb import codes
from service.openrtb.blocks import size_of
from service.openrtb.macros import notice_url
from service.openrtb.mapping import Line, Source
from service.openrtb.offers import Terms
from service.openrtb.requests import Asked

_URLS = {"win": "nurl", "billed": "burl", "loss": "lurl"}
_COPIED = ("adid", "crid", "cid", "bundle", "language", "iurl")


@dataclass(frozen=True, slots=True)
class Made:
    """One bid: the imp, its terms, the line that bids, the price in nanos, and its ticket."""

    imp: dict[str, Any]
    terms: Terms
    line: Line
    price: int
    currency: str
    ticket: str
    ref: str


def response(source: Source, asked: Asked, bid_id: str, bids: list[Made]) -> dict[str, Any]:
    """
    The answer to a request that is bid on.

    Args:
        bid_id: Our name for this answer, which comes back where a seller asks for it.
    """
    seat: dict[str, Any] = {"bid": [_bid(source, made) for made in bids]}
    if source.seat is not None:
        seat["seat"] = source.seat
    return {"id": asked.id, "bidid": bid_id, "cur": bids[0].currency, "seatbid": [seat]}


def _bid(source: Source, made: Made) -> dict[str, Any]:
    line, urls = made.line, {k: notice_url(source, k, made.ticket) for k in _URLS}
    # The public name of the bid, never its ticket, which is proof of being the exchange.
    bid: dict[str, Any] = {
        "id": made.ref,
        "impid": made.imp["id"],
        "price": money.cpm_number(made.price),
        **{_URLS[kind]: urls[kind] for kind in source.notices},
        **{name: value for name in _COPIED if (value := getattr(line, name)) is not None},
        "mtype": codes.MARKUP[line.type],
    }
    if line.adomain:
        bid["adomain"] = line.adomain
    if line.cat:
        bid |= {"cat": line.cat, "cattax": line.cattax}
    if line.attr:
        bid["attr"] = line.attr
    if made.terms.deal is not None:
        bid["dealid"] = made.terms.deal
    if line.duration_s is not None:
        bid["dur"] = line.duration_s
    if line.exp_s is not None:
        bid["exp"] = line.exp_s
    if line.adm is not None:
        bid["adm"] = _with_urls(line.adm, urls)
    size = size_of(line, made.imp)
    if size is not None:
        bid["w"], bid["h"] = (int(part) for part in size.split("x"))
    return bid


def _with_urls(markup: str, urls: dict[str, str]) -> str:
    """Markup with our addresses in it: for video the impression event is the bill."""
    for kind, url in urls.items():
        markup = markup.replace(f"[[{kind}_url]]", url)
    return markup
