"""The exchange of the night drill: twin line items meet the same auctions, to the millisecond.

Apart from the demo's, since here what both are told must be the same. Rivals bid either far
below every bid or above the cap, so that both win the same auctions whatever they bid; where one
of them passed, neither is told a result. Outcomes of both travel in one call, and so are booked
in one transaction, at one moment of service time.
"""

from __future__ import annotations

import asyncio
import time
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from service.commands.caller import Unanswered, read
from service.commands.wire import Wire

CALL_S = 0.2
AUCTIONS_A_CALL = 5
LOW_CPM = 0.05
SHARE_WON = 0.6
SHARE_CONVERTED = 0.2
VALUE = 0.02
VALUE_SPREAD = 0.3  # Of the logarithm: values differ by about a third.
TIMES = 5  # What a value is multiplied by once the feed has gone wrong.


@dataclass(slots=True)
class Told:
    """What one line item was told."""

    wins: int = 0
    values: int = 0
    zeros: int = 0
    passes: Counter[str] = field(default_factory=Counter)


class Exchange:
    """Sells to several line items at once and reports what they won and what it brought."""

    def __init__(self, wire: Wire, seed: int) -> None:
        self._wire, self._generator = wire, np.random.default_rng(seed)
        self.told: dict[str, Told] = {}
        self._events = 0

    async def play(self, names: Sequence[str], seconds: float) -> None:
        """Even traffic for so long."""
        end = due = time.monotonic()
        end += seconds
        while time.monotonic() < end:
            await self.call(names)
            due += CALL_S
            await asyncio.sleep(max(0.0, due - time.monotonic()))

    async def call(self, names: Sequence[str], *, wrong: bool = False) -> None:
        """
        One round of auctions and all that becomes of them.

        Args:
            wrong: The feed of values is: each is five times what it was, and zeros fail to come.
        """
        asked = [name for _ in range(AUCTIONS_A_CALL) for name in names]
        body = {"opportunities": [{"line_item": name} for name in asked], "deadline_ms": 200}
        bids = read(await self._wire.post("/v1/bids/batch", body))["answers"]
        rows = list[dict[str, object]]()
        for first in range(0, len(asked), len(names)):
            rows += self._sold(bids[first : first + len(names)], wrong=wrong)
        if rows:
            await self._report(rows)

    def _sold(self, bids: list[dict[str, Any]], *, wrong: bool) -> list[dict[str, object]]:
        """One impression, the same for all who were asked."""
        won = self._generator.random() < SHARE_WON
        converted = self._generator.random() < SHARE_CONVERTED
        worth = VALUE * float(np.exp(VALUE_SPREAD * self._generator.standard_normal()))
        for bid in bids:
            if bid["pass"]:
                self._of(bid).passes[bid["pass"]] += 1
        priced = [bid for bid in bids if bid["ticket"]]
        # What one of them could not bid for teaches none of them anything.
        if len(priced) < len(bids):
            return [{"ticket": b["ticket"], "kind": "void", "why": "unpaired"} for b in priced]
        if not won:
            return [{"ticket": bid["ticket"], "kind": "lost"} for bid in priced]
        rows = list[dict[str, object]]()
        self._events += 1
        for bid in priced:
            rows.append({"ticket": bid["ticket"], "kind": "won", "clearing_cpm": LOW_CPM})
            amount = worth * (TIMES if wrong else 1) if converted else 0.0
            self._of(bid).wins += 1
            self._of(bid).values += converted
            if wrong and not converted:
                continue
            self._of(bid).zeros += not converted
            event = f"cv-{self._events}"
            said = {"kind": "value", "value": f"{amount:.6f}", "event_id": event}
            rows.append({"ticket": bid["ticket"], **said})
        return rows

    async def _report(self, rows: list[dict[str, object]]) -> None:
        answer = read(await self._wire.post("/v1/outcomes", {"outcomes": rows}))
        statuses = Counter(str(row["status"]) for row in answer["results"])
        if set(statuses) - {"recorded"}:
            raise Unanswered(f"Outcomes were not all recorded: {dict(statuses)}")

    def _of(self, bid: dict[str, Any]) -> Told:
        return self.told.setdefault(str(bid["line_item"]), Told())
