"""The only place where text or numbers become money, and money becomes text.

One unit: the nano, 10**-9 of the line item's currency, as an int that fits 64 bits.
A price is kept per impression, so a CPM of 0.000001 is exactly one nano.
"""

from __future__ import annotations

import re
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Context, Decimal, Inexact

NANOS_PER_UNIT = 10**9
NANOS_PER_CPM = 10**6
NANOS_MAX = 2**62  # Half of int64, so that the sum of two amounts never overflows a column.
PRICE_NANOS_MAX = 10**15  # A CPM of 10**9: up to here a JSON number keeps all six decimals.
# A number of a million digits costs seconds to convert; no amount needs more than these.
DIGITS_MAX = 60

DOWN, UP, HALF_EVEN = ROUND_FLOOR, ROUND_CEILING, ROUND_HALF_EVEN

# Only plain decimals: Decimal itself would also take NaN, Infinity, 1e9, blanks and digits of
# other scripts, each of which some caller means differently.
_TEXT = re.compile(r"-?(0|[1-9][0-9]{0,18})(\.[0-9]{1,30})?")
# Tells too many digits at a fraction of what counting them would cost.
_SHORT = Context(prec=DIGITS_MAX, traps=[Inexact])


class NotMoney(ValueError):
    """The text or number does not name an amount of money."""


def nanos(amount: object) -> int:
    """
    Read an amount of money, such as "500.00", exactly.

    Raises:
        NotMoney: Not a plain decimal, finer than a nano, or out of range.
    """
    return _scaled(amount, NANOS_PER_UNIT, None)


def price(cpm: object, rounding: str | None = None) -> int:
    """
    Read a CPM price, such as 1.25, as nanos per impression.

    Args:
        cpm: Decimal, int or plain decimal text.
        rounding: DOWN for bids, UP for floors and holds, HALF_EVEN for spend;
            None refuses more than six decimals.

    Raises:
        NotMoney: Not a plain decimal, or out of range.
    """
    scaled = _scaled(cpm, NANOS_PER_CPM, rounding)
    if abs(scaled) > PRICE_NANOS_MAX:
        raise NotMoney("out of range")
    return scaled


def nanos_rounded(amount: object, rounding: str) -> int:
    """
    Read an amount that may be finer than a nano, such as a value out of a feed.

    Raises:
        NotMoney: Not a plain decimal, or out of range.
    """
    return _scaled(amount, NANOS_PER_UNIT, rounding)


def nanos_text(amount_nanos: int) -> str:
    """Write an amount as a decimal string with at least two decimals."""
    sign = "-" if amount_nanos < 0 else ""
    whole, part = divmod(abs(amount_nanos), NANOS_PER_UNIT)
    decimals = f"{part:09d}".rstrip("0").ljust(2, "0")
    return f"{sign}{whole}.{decimals}"


def cpm_number(price_nanos: int) -> float:
    """Write a price per impression as a CPM number, exact up to PRICE_NANOS_MAX."""
    return price_nanos / NANOS_PER_CPM


def _scaled(amount: object, scale: int, rounding: str | None) -> int:
    over, under = _ratio(amount)
    whole, rest = divmod(over * scale, under)
    if rest:
        if rounding is None:
            raise NotMoney("more decimals than this field can hold")
        whole += _rounds_up(whole, 2 * rest - under, rounding)
    if not -NANOS_MAX <= whole <= NANOS_MAX:
        raise NotMoney("out of range")
    return whole


def _rounds_up(whole: int, beyond_half: int, rounding: str) -> bool:
    """Whether a number with a part after the point goes up from its whole part."""
    if rounding == HALF_EVEN:
        return beyond_half > 0 or (beyond_half == 0 and whole % 2 == 1)
    return rounding == UP


def _ratio(amount: object) -> tuple[int, int]:
    """The amount as a whole number over another one, which is exact and quick."""
    # In Python True is the int 1, and would buy something.
    if isinstance(amount, bool):
        raise NotMoney("a truth value is no amount")
    if isinstance(amount, Decimal):
        return _plain(amount).as_integer_ratio()
    if isinstance(amount, int):
        if abs(amount) > NANOS_MAX:
            raise NotMoney("out of range")
        return amount, 1
    if isinstance(amount, str) and _TEXT.fullmatch(amount):
        return Decimal(amount).as_integer_ratio()
    raise NotMoney("not a plain decimal")


def _plain(amount: Decimal) -> Decimal:
    # It is short to send, but 1e999999 is finite too and stands for a million digits.
    if not amount.is_finite() or abs(amount.adjusted()) > 30:
        raise NotMoney("not a plain decimal")
    try:
        _SHORT.plus(amount)
    except Inexact as error:
        raise NotMoney("more digits than an amount can have") from error
    return amount
