"""Which line items may buy an imp, and on what terms: the same words for prices and for people."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from service.openrtb import codes
from service.openrtb.blocks import unfit
from service.openrtb.floors import BadFloor, floor_of, multiplier_of
from service.openrtb.mapping import Line, Source
from service.openrtb.requests import Asked, auction_of, seated, texts

DEALS_MAX = 100


@dataclass(frozen=True, slots=True)
class Terms:
    """
    One way to buy an imp.

    Args:
        deal: Its id; None outside deals.
        floor: In nanos per impression of `currency`; the price itself where it is fixed.
        multiplier: Impressions that one sale is expected to bring, in parts of 10^9.
    """

    deal: str | None
    auction: str
    floor: int
    currency: str
    multiplier: int


Judged = tuple[Terms, ...] | str


def judge(line: Line, imp: dict[str, Any], asked: Asked, source: Source) -> Judged:
    """All ways in which a line may buy an imp, deals first; or one word for why not."""
    refused = _conditions(line, imp, asked.body) or unfit(line, imp, asked.body)
    if refused is not None:
        return refused
    try:
        return _ways(line, imp, asked, source)
    except BadFloor:
        return "floor_unreadable"


def lots(imp: dict[str, Any], asked: Asked, source: Source) -> list[tuple[Terms, dict[str, Line]]]:
    """
    The terms on which an imp may be asked for, in order, each with the lines that compete for it.

    Deals come before the open auction, and then the mapping's order decides.
    """
    found: dict[Terms, dict[str, Line]] = {}
    for line in source.line_items:
        judged = judge(line, imp, asked, source)
        for terms in () if isinstance(judged, str) else judged:
            # Of several creatives of one line item the first that fits is shown.
            found.setdefault(terms, {}).setdefault(line.line_item, line)
    return sorted(found.items(), key=lambda lot: lot[0].deal is None)


def _conditions(line: Line, imp: dict[str, Any], body: dict[str, Any]) -> str | None:
    for path, wanted in line.when.items():
        if wanted.isdisjoint(path.words(body, imp)):
            return "not_when"
    for path, unwanted in line.unless.items():
        if not unwanted.isdisjoint(path.words(body, imp)):
            return "unless"
    return None


def _ways(line: Line, imp: dict[str, Any], asked: Asked, source: Source) -> Judged:
    market = imp.get("pmp")
    market = market if isinstance(market, dict) else {}
    multiplier = multiplier_of(imp)
    ways = [
        terms
        for deal in _deals(market)
        if (terms := _deal_terms(line, imp, deal, asked, source, multiplier)) is not None
    ]
    private = market.get("private_auction") in (1, True)
    if private or not line.open:
        return tuple(ways) or ("private_auction" if private else "no_deal")
    if asked.auction is None:
        return tuple(ways) or "auction_unknown"
    floor, currency = floor_of(imp, line.type, None, line.duration_s)
    return (*ways, Terms(None, asked.auction, floor, currency, multiplier))


def _deals(market: dict[str, Any]) -> list[dict[str, Any]]:
    deals = market.get("deals")
    several = deals[:DEALS_MAX] if isinstance(deals, list) else []
    return [deal for deal in several if isinstance(deal, dict) and isinstance(deal.get("id"), str)]


def _deal_terms(
    line: Line,
    imp: dict[str, Any],
    deal: dict[str, Any],
    asked: Asked,
    source: Source,
    multiplier: int,
) -> Terms | None:
    """The terms of one deal, or None where it is not for this line."""
    if line.deals != "any" and deal["id"] not in line.deals:
        return None
    if not seated(deal, source.seat):
        return None
    advertisers = texts(deal.get("wadomain"))
    if advertisers and not set(advertisers) & set(line.adomain):
        return None
    floor, currency = floor_of(imp, line.type, deal, line.duration_s)
    if deal.get("at") == codes.FIXED_DEAL:
        # A price of nothing cannot be met, since a bid of nothing never leaves.
        return Terms(deal["id"], "fixed", floor, currency, multiplier) if floor else None
    auction = asked.auction
    if deal.get("at") is not None:
        auction = auction_of(deal["at"], source)
    return None if auction is None else Terms(deal["id"], auction, floor, currency, multiplier)
