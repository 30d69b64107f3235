"""What the other side knows: an exchange that keeps its own books of what it charged.

It shares nothing with the ledger but the words of an outcome.
"""

from __future__ import annotations


class Exchange:
    """
    One bid costs once, whatever is said of it and how often.

    Under `won` the first win or bill costs. Under `billed` the first bill costs, or a
    win that came after the bid had been called lost or void, whichever is first.
    """

    def __init__(self, spend_on: str) -> None:
        self._spend_on = spend_on
        self._results: dict[bytes, str] = {}
        self.charges: dict[bytes, int] = {}

    @property
    def charged(self) -> int:
        """All that was charged so far, in nanos."""
        return sum(self.charges.values())

    def hear(self, bid: bytes, kind: str, price: int | None) -> None:
        """Take note of one outcome as it is reported."""
        if bid not in self.charges and self._costs(bid, kind):
            self.charges[bid] = price or 0
        elif bid not in self.charges and kind != "billed":
            self._results.setdefault(bid, kind)

    def _costs(self, bid: bytes, kind: str) -> bool:
        if kind == "billed" or (kind == "won" and self._spend_on == "won"):
            return True
        return kind == "won" and self._results.get(bid) in ("lost", "void")


class KeptWord:
    """
    What an exchange may say that keeps its word: in time, once, nothing above the bid.

    Args:
        grace_ms: The longest delay between a bid and its outcome.
        billing_grace_ms: The longest delay between a win and its bill.
    """

    def __init__(self, spend_on: str, grace_ms: int, billing_grace_ms: int) -> None:
        self._spend_on = spend_on
        self._grace_ms, self._billing_grace_ms = grace_ms, billing_grace_ms
        self._bids: dict[bytes, tuple[int, int]] = {}
        self._past: dict[bytes, dict[str, tuple[int, int]]] = {}

    def given(self, bid: bytes, hold: int, at_ms: int) -> None:
        """Take note of a bid and of when it came."""
        self._bids[bid], self._past[bid] = (hold, at_ms), {}

    def allows(self, bid: bytes, kind: str, price: int, now_ms: int) -> bool:
        """Whether this would be said of the bid now; it is noted if so."""
        past, (hold, at_ms) = self._past[bid], self._bids[bid]
        above = kind in ("won", "billed") and price > hold
        if above or kind in past or not self._in_time(past, kind, price, at_ms, now_ms):
            return False
        past[kind] = (price, now_ms)
        return True

    def _in_time(
        self, past: dict[str, tuple[int, int]], kind: str, price: int, at_ms: int, now_ms: int
    ) -> bool:
        if not past:
            return now_ms - at_ms <= self._grace_ms
        if set(past) != {"won"}:
            return set(past) == {"billed"} and kind == "won"
        cost, won_ms = past["won"]
        unsaid = kind == "void" and self._spend_on == "billed"
        soon = now_ms - won_ms <= self._billing_grace_ms
        return soon and (unsaid or (kind == "billed" and price <= cost))
