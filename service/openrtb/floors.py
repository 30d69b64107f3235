"""Which floor counts, and in which currency: by the implementation guide, section 7.11."""

from __future__ import annotations

from decimal import Decimal
from typing import Any

from service import money
from service.openrtb import codes

Floor = tuple[int, str]
WHOLE = 10**9
MULTIPLIER_MAX = 10**6


class BadFloor(ValueError):
    """A floor or a quantity that is none; a bid under it would break the seller's rule."""


def floor_of(
    imp: dict[str, Any], media: str, deal: dict[str, Any] | None, duration_s: int | None
) -> Floor:
    """
    The floor in nanos per impression, rounded up, and its currency.

    A deal's is in dollars unless the deal itself says otherwise: it inherits nothing of the imp.

    Raises:
        BadFloor: It is not to be read, or goes by a duration that nobody knows.
    """
    place = imp if deal is None else deal
    timed = imp.get(media) if deal is None else deal
    currency = place.get("bidfloorcur") or codes.CURRENCY_DEFAULT
    if not isinstance(currency, str) or len(currency) != 3 or not currency.isascii():
        raise BadFloor("no currency")
    price = _by_time(timed, duration_s) if media in codes.TIMED else None
    return (cpm(place.get("bidfloor")) if price is None else price), currency.upper()


def cpm(found: object) -> int:
    """
    A floor as the seller wrote it; nothing is no floor, and less than nothing is none either.

    Raises:
        BadFloor: Not a number.
    """
    return max(0, money.price(Decimal(0), money.UP) if found is None else _price(found))


def multiplier_of(imp: dict[str, Any]) -> int:
    """
    Impressions that one sale is expected to bring, in parts of 10^9.

    Raises:
        BadFloor: Not a number above 0, or beyond any crowd.
    """
    quantity = imp.get("qty")
    found = quantity.get("multiplier") if isinstance(quantity, dict) else None
    if found is None:
        return WHOLE
    count = _decimal(found)
    if not 0 < count <= MULTIPLIER_MAX:
        raise BadFloor("no multiplier")
    try:
        # Up, since the hold goes by it.
        return money.nanos_rounded(count, money.UP)
    except money.NotMoney as error:
        raise BadFloor("no multiplier") from error


def _by_time(place: object, duration_s: int | None) -> int | None:
    """A floor that goes by the creative's duration, where the seller set one."""
    if not isinstance(place, dict):
        return None
    per_second, ranges = place.get("mincpmpersec"), place.get("durfloors")
    if per_second is None and not isinstance(ranges, list):
        return None
    if duration_s is None:
        raise BadFloor("no duration to go by")
    if per_second is not None:
        return max(0, _price(_decimal(per_second) * duration_s))
    fitting = [one for one in ranges or () if isinstance(one, dict) and _covers(one, duration_s)]
    # Ranges may overlap; the highest of theirs breaks none of them.
    return max((cpm(one.get("bidfloor")) for one in fitting), default=None)


def _covers(one: dict[str, Any], duration_s: int) -> bool:
    least, most = one.get("mindur"), one.get("maxdur")
    return (least is None or _decimal(least) <= duration_s) and (
        most is None or duration_s <= _decimal(most)
    )


def _price(found: object) -> int:
    try:
        return money.price(_decimal(found), money.UP)
    except money.NotMoney as error:
        raise BadFloor("no price") from error


def _decimal(found: object) -> Decimal:
    if isinstance(found, Decimal):
        # What is no number cannot even be compared, so it must not get as far as a limit.
        if not found.is_finite():
            raise BadFloor("not a number")
        return found
    if isinstance(found, bool) or not isinstance(found, int | float):
        raise BadFloor("not a number")
    # The shortest text that means this float is what the seller wrote.
    if not abs(found) <= 2**62:  # Said so that NaN, too, is out of range.
        raise BadFloor("out of range")
    return Decimal(repr(found))
