"""What a drill's exchange has sent and seen, kept apart from the service it is held against.

Every call ends in one of three ways: ok (an answer that promises something), fail (it never
left) or unknown (it may have happened). Only what was ok must be there; what is unknown may be.
"""

from __future__ import annotations

import time
from collections import Counter
from dataclasses import dataclass, field

from service import money
from service.commands.wire import Reply

SETTLED = frozenset({"recorded", "late", "parked", "duplicate"})
OK, FAIL, UNKNOWN, REFUSED = "ok", "fail", "unknown", "refused"


@dataclass(slots=True)
class Sent:
    """
    One outcome as the exchange knows it.

    Attributes:
        slot: The place it fills in our stream: result, or value:EVENT.
        price: What it costs in nanos; 0 for everything but a win.
        first_s: When its bid left, by the drill's own clock.
        tries: Calls that carried it and may have arrived.
        acknowledged_s: When a receipt came; None while none has.
    """

    line_item: str
    ref: str
    slot: str
    kind: str
    price: int
    body: dict[str, object]
    first_s: float
    tries: int = 0
    acknowledged_s: float | None = None


@dataclass(frozen=True, slots=True)
class Read:
    """One look at the money of a line item, between what was known before and after; nanos."""

    line_item: str
    budget: int
    spent: int
    held: int
    cost: int
    acknowledged_before: int
    charged_after: int

    def fault(self) -> str | None:
        """Which promise this read breaks, if any."""
        # The promise to the advertiser comes first: nothing beyond the budget, even held.
        if self.spent + self.held > self.budget:
            return f"V1: spent {self.spent} + held {self.held} > budget {self.budget}"
        # Calls run on during a look, so the books are held against both ends of it.
        if self.cost < self.acknowledged_before:
            return f"lost: {self.cost} booked, {self.acknowledged_before} was acknowledged"
        if self.cost > self.charged_after:
            return f"invented: {self.cost} booked, {self.charged_after} was charged"
        return None


@dataclass(slots=True)
class History:
    """Every call of one drill and what it ended in."""

    sent: list[Sent] = field(default_factory=list)
    calls: Counter[str] = field(default_factory=Counter)
    passes: Counter[str] = field(default_factory=Counter)
    charged: Counter[str] = field(default_factory=Counter)
    acknowledged: Counter[str] = field(default_factory=Counter)
    reads: int = 0
    faults: list[str] = field(default_factory=list)
    answers_s: list[float] = field(default_factory=list)

    def ended(self, what: str, how: str) -> None:
        """Count a call by what it asked for and how it ended."""
        self.calls[f"{what} {how}"] += 1

    def sell(self, row: Sent) -> None:
        """Charge a win the moment it is sold, whether or not anybody hears of it."""
        self.sent.append(row)
        self.charged[row.line_item] += row.price

    def receive(self, row: Sent, status: str, code: object) -> None:
        """Take note of a receipt; one that settles nothing is a fault."""
        if status not in SETTLED:
            self.faults.append(f"an outcome was {status}: {code}")
        # A repeat is answered again, and must not be counted twice.
        elif row.acknowledged_s is None:
            row.acknowledged_s = time.monotonic()
            self.acknowledged[row.line_item] += row.price
            self.calls[f"receipt {status}"] += 1

    def look(self, read: Read) -> None:
        """Take note of a look at the money."""
        self.reads += 1
        fault = read.fault()
        if fault is not None:
            self.faults.append(f"{read.line_item}: {fault}")

    @property
    def delay_s_max(self) -> float:
        """The longest time from a bid to the receipt of its outcome."""
        delays = [s.acknowledged_s - s.first_s for s in self.sent if s.acknowledged_s is not None]
        return max(delays, default=0.0)


def how_ended(reply: Reply) -> str:
    """What an HTTP answer means for the call: 503 says of itself that it is unknown."""
    if reply.status == 200:
        return OK
    return UNKNOWN if reply.status == 503 else REFUSED


def of_state(state: dict[str, dict[str, str]]) -> tuple[int, int, int, int]:
    """Budget, spent, held and all cost of a line item's state, in nanos."""
    books = state["money"]
    spent, loose = money.nanos(books["spent"]), money.nanos(books["unfunded"])
    cost = spent + loose + money.nanos(books["disputed"])
    return money.nanos(books["budget"]), spent, money.nanos(books["held"]), cost
