"""What an impression costs beyond its price, apart because inside all money is gross.

Budgets, holds, caps and what is learnt of rivals are gross; only the price that leaves and the
prices that come back are net of fees, and are turned here, so that no other rule knows of them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

WHOLE = 10**9


@dataclass(frozen=True, slots=True)
class Fees:
    """
    Fees on top of what an impression sells for.

    Args:
        share: Of the price, in parts of 10^9.
        flat: For every impression, in nanos.
    """

    share: int = 0
    flat: int = 0

    @staticmethod
    def of(said: Mapping[str, Any] | None) -> Fees:
        """Those that a configuration names."""
        return Fees(said.get("share", 0), said.get("cpm", 0)) if said else NONE

    def gross(self, net: int) -> int:
        """The cost of a price, rounded up: a hold must never fall short."""
        # Most line items have none, and every bid asks.
        if self is NONE:
            return net
        return net + -(-net * self.share // WHOLE) + self.flat

    def net(self, gross: int) -> int:
        """The largest price whose cost is within this; below 0 where the fees alone are more."""
        if self is NONE:
            return gross
        return (gross - self.flat) * WHOLE // (WHOLE + self.share)


NONE = Fees()
