"""A bid request as far as it holds for all of its imps: who may bid, by when, in which money."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from service.openrtb import codes
from service.openrtb.mapping import Source

ID_CHARACTERS_MAX = 256
IMPS_MAX = 100


class BadRequest(ValueError):
    """Not a bid request: what the standard calls malformed."""


@dataclass(frozen=True, slots=True)
class NoBid:
    """
    Why nothing of a request is bid on.

    Args:
        id: Of the request, for the answer; None where it has none.
        reason: A word of ours.
        code: Of the standard's list, where one fits.
    """

    id: str | None
    reason: str
    code: int | None = None


@dataclass(frozen=True, slots=True)
class Asked:
    """
    What a request asks.

    Args:
        imps: Those that have an id of their own, in order.
        auction: Of imps outside deals; None where this source says nothing of its kind.
        currencies: In which it may be bid, the seller's first wish first.
        deadline_ms: Counted from arrival; None where the request names no time.
    """

    id: str
    body: dict[str, Any]
    imps: list[dict[str, Any]]
    auction: str | None
    currencies: tuple[str, ...]
    deadline_ms: int | None
    test: bool


def read(body: object, source: Source) -> Asked | NoBid:
    """
    Read what holds for the whole request; unknown fields and odd ones we do not need stay unread.

    Raises:
        BadRequest: No id, or no imp, or more of them than anybody sells at once.
    """
    if not isinstance(body, dict):
        raise BadRequest("not an object")
    name, imps = body.get("id"), body.get("imp")
    if not isinstance(name, str) or not 0 < len(name) <= ID_CHARACTERS_MAX:
        raise BadRequest("no id")
    if not isinstance(imps, list) or not 0 < len(imps) <= IMPS_MAX:
        raise BadRequest("no imp, or too many")
    if not seated(body, source.seat):
        return NoBid(name, "seat_not_allowed")
    deadline_ms = _deadline_ms(body.get("tmax"), source.margin_ms)
    if deadline_ms is not None and deadline_ms <= 0:
        return NoBid(name, "no_time", codes.NO_TIME)
    currencies = _currencies(body, source)
    if not currencies:
        return NoBid(name, "no_currency")
    kept = _with_ids(imps)
    if not kept:
        raise BadRequest("no imp has an id")
    # Whatever it says but no: nobody pays for a test, so nothing may be set aside for one.
    test = body.get("test") not in (None, 0, False)
    auction = auction_of(body.get("at"), source)
    return Asked(name, body, kept, auction, currencies, deadline_ms, test)


def auction_of(kind: object, source: Source, inherited: str | None = None) -> str | None:
    """The kind of auction that `at` stands for; None where nobody told us what it means."""
    if kind is None:
        return inherited or codes.AUCTIONS[codes.AUCTION_DEFAULT]
    # True is an int as well, and 1.0 is how some write 1.
    if isinstance(kind, bool) or not isinstance(kind, int | float) or int(kind) != kind:
        return None
    if kind >= codes.PRIVATE:
        return source.private_auctions.get(str(int(kind)))
    return codes.AUCTIONS.get(int(kind))


def seated(place: dict[str, Any], seat: str | None) -> bool:
    """Whether our seat may buy here."""
    allowed, blocked = texts(place.get("wseat")), texts(place.get("bseat"))
    return (not allowed or seat in allowed) and seat not in blocked


def texts(found: object) -> list[str]:
    """The texts of a list; one that stands alone counts as a list of one."""
    several = found if isinstance(found, list) else [found]
    return [one for one in several if isinstance(one, str)]


def _currencies(body: dict[str, Any], source: Source) -> tuple[str, ...]:
    named = [text.upper() for text in texts(body.get("cur"))]
    usable = dict.fromkeys(c for c in named if len(c) == 3 and c.isascii() and c.isalpha())
    # A list of nothing that is a currency is no leave to bid in any.
    return tuple(usable) if body.get("cur") else tuple(source.currencies)


def _deadline_ms(tmax: object, margin_ms: int) -> int | None:
    if isinstance(tmax, bool) or not isinstance(tmax, int | float):
        return None
    return max(0, min(int(tmax), 60_000) - margin_ms)


def _with_ids(imps: list[Any]) -> list[dict[str, Any]]:
    kept: dict[str, dict[str, Any]] = {}
    for imp in imps:
        name = imp.get("id") if isinstance(imp, dict) else None
        # Of two under one id nobody could say which of them a bid is for.
        if isinstance(name, str) and 0 < len(name) <= ID_CHARACTERS_MAX and name not in kept:
            kept[name] = imp
    return list(kept.values())
