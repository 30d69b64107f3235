"""From a price in an exchange's currency to what it costs here, apart because rounding is a rule.

The bid rounds down and the hold up, so that what is asked for a bid is never above its hold.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

WHOLE = 10**9
_SQUARE = WHOLE * WHOLE


@dataclass(frozen=True, slots=True)
class Scale:
    """
    How a price outside becomes an amount inside.

    Args:
        currency: Of the price outside; empty where it is the line item's own.
        rate: What one unit of it costs in the line item's currency, in parts of 10^9.
        multiplier: Impressions that one sale is expected to bring, in parts of 10^9.
    """

    currency: str = ""
    rate: int = WHOLE
    multiplier: int = WHOLE

    def sent(self, net: int) -> int:
        """The largest price for one impression whose cost is within `net` nanos."""
        if self is PLAIN:
            return net
        # Down, as a nano more would cost more than was set aside.
        return net * _SQUARE // (self.rate * max(self.multiplier, WHOLE))

    def worth(self, price: int) -> int:
        """What `net` must reach for this price to leave, rounded up."""
        if self is PLAIN:
            return price
        # Where less than one impression is expected, a cap for one still binds the price of one.
        return -(-price * self.rate * max(self.multiplier, WHOLE) // _SQUARE)

    def held(self, price: int) -> int:
        """The most that this price may cost, rounded up."""
        if self is PLAIN:
            return price
        return -(-price * self.rate * self.multiplier // _SQUARE)

    def paid(self, price: int, delivered: int | None = None) -> int:
        """
        What a clearing price costs, rounded half to even.

        Args:
            delivered: Impressions that came of it, in parts of 10^9, if it was told; what is
                beyond the number asked for was never bought.
        """
        # As a whole it is worth itself, and every outcome asks.
        if self is PLAIN and delivered is None:
            return price
        told = delivered is not None and 0 < delivered <= self.multiplier
        count = delivered if told and delivered is not None else self.multiplier
        whole, rest = divmod(price * self.rate * count, _SQUARE)
        return whole + (2 * rest > _SQUARE or (2 * rest == _SQUARE and whole % 2 == 1))


PLAIN = Scale()


@dataclass(frozen=True, slots=True)
class Rate:
    """
    What one unit of `currency` costs in `into`, in parts of 10^9, from a moment on.

    Args:
        number: Its place in the order of posting: of two from one moment the later one counts.
        until_ms: From when it counts no more, if nobody posts another; wall clock.
    """

    number: int
    currency: str
    into: str
    rate: int
    from_ms: int
    until_ms: int | None = None


class Rates:
    """All rates that one worker knows."""

    def __init__(self, rates: Iterable[Rate] = ()) -> None:
        self._pairs: dict[tuple[str, str], list[Rate]] = {}
        for rate in sorted(rates, key=lambda one: (one.from_ms, one.number), reverse=True):
            self._pairs.setdefault((rate.currency, rate.into), []).append(rate)

    def at(self, currency: str, into: str, wall_ms: int) -> int | None:
        """The rate at this moment; None where nobody posted one, or the newest has ended."""
        if currency == into:
            return WHOLE
        begun = (r for r in self._pairs.get((currency, into), ()) if r.from_ms <= wall_ms)
        newest = next(begun, None)
        if newest is None or (newest.until_ms is not None and newest.until_ms <= wall_ms):
            return None
        return newest.rate
