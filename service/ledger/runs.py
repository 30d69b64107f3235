"""First results of bids whose slice is open, added up, since nearly every outcome is one of these.

What each moves depends on no balance, so the sum of many is booked at once. The rules are those
of settle.py, which decides all other outcomes and these alike, one by one.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from service.ledger import settle
from service.ledger.accounts import Movement, Slice
from service.ledger.settle import Outcome


@dataclass(slots=True)
class Run:
    """
    What results out of one slice have moved and are not booked yet, in nanos.

    Args:
        spend_on: "won" or "billed".
        rounds: Newly counted.
    """

    slice: Slice
    spend_on: str
    hold: int = 0
    cost: int = 0
    owed: int = 0
    excess: int = 0
    rounds: int = 0

    def take(self, outcome: Outcome) -> tuple[dict[str, Any], int]:
        """
        Add the first that is told of a bid; returns the body of its entry and what it cost.

        Its kind is won, lost or void: a bill is no result.
        """
        cost, owed, excess = settle.shares(outcome, self.spend_on)
        rounds = settle.counted(outcome, self.slice)
        self.hold += outcome.hold
        self.cost += cost
        self.owed += owed
        self.excess += excess
        self.rounds += rounds
        body = settle.result_body(outcome, rounds, owed, late=False)
        body["slice"], body["day"] = self.slice.id.hex(), self.slice.day
        return body, cost + excess

    @property
    def movement(self) -> Movement:
        """All of it as one movement of the line item, the day and the slice."""
        return settle.of_open(self.hold, self.cost, self.owed, self.excess)
