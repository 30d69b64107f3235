"""The money rows as values, and the one way to change them: by adding a movement."""

from __future__ import annotations

from typing import NamedTuple

NO_LIMIT = 2**61  # Stands in a day's budget when a line item has no daily budget.


class Movement(NamedTuple):
    """What one event adds to the money rows, in nanos; only differences, never totals."""

    spent: int = 0
    held: int = 0
    unfunded: int = 0
    disputed: int = 0
    remaining: int = 0
    owed: int = 0
    day_spent: int = 0
    day_over_spent: int = 0

    # Written out and not looped over: this is the one sum that all money goes through.
    def __add__(self, other: Movement) -> Movement:  # type: ignore[override]
        return Movement(
            self.spent + other.spent,
            self.held + other.held,
            self.unfunded + other.unfunded,
            self.disputed + other.disputed,
            self.remaining + other.remaining,
            self.owed + other.owed,
            self.day_spent + other.day_spent,
            self.day_over_spent + other.day_over_spent,
        )

    @property
    def cost(self) -> int:
        """How much of a clearing price this movement accepted, in nanos."""
        return self.spent + self.unfunded + self.disputed


NOTHING = Movement()


class Account(NamedTuple):
    """
    A line item's balance in nanos; spent + held <= budget always holds.

    `target` is what the operator asked for: leases stop above it, and `budget`
    falls towards it as holds are released.
    """

    line_item: str
    budget: int
    target: int
    spent: int
    held: int
    unfunded: int
    disputed: int
    seq: int
    at_ms: int

    @property
    def free(self) -> int:
        """Money that may still be leased, in nanos."""
        # Unfunded cost is not taken off: it is owed beyond the budget, not out of it.
        return max(0, self.target - self.spent - self.held)

    def moved(self, movement: Movement) -> Account:
        """This account after the movement; a lowered budget follows its target down."""
        # The bound may only fall as far as what is out already, or the promise would break.
        spent, held = self.spent + movement.spent, self.held + movement.held
        return Account(
            self.line_item,
            max(self.target, spent + held) if self.budget > self.target else self.budget,
            self.target,
            spent,
            held,
            self.unfunded + movement.unfunded,
            self.disputed + movement.disputed,
            self.seq,
            self.at_ms,
        )


class Day(NamedTuple):
    """One local day's share of a line item's money, in nanos, with a limit of its own."""

    line_item: str
    day: str
    budget: int
    target: int
    spent: int
    held: int
    over_spent: int

    @property
    def free(self) -> int:
        """Money that may still be leased for this day; late costs beyond it count too."""
        return max(0, self.target - self.spent - self.held - self.over_spent)

    @property
    def room(self) -> int:
        """What a late cost may still add to this day's spend, in nanos."""
        return max(0, self.budget - self.spent - self.held)

    def moved(self, movement: Movement) -> Day:
        """This day after the movement."""
        spent, held = self.spent + movement.day_spent, self.held + movement.held
        return Day(
            self.line_item,
            self.day,
            max(self.target, spent + held) if self.budget > self.target else self.budget,
            self.target,
            spent,
            held,
            self.over_spent + movement.day_over_spent,
        )


class Slice(NamedTuple):
    """
    The part of a budget that one worker may commit; amounts in nanos, times in service ms.

    `ticked` bids were reported by ticks; `counted` are rounds already taught.
    """

    id: bytes
    line_item: str
    worker: str
    day: str
    amount: int
    remaining: int
    owed: int
    ticked: int
    counted: int
    state: str

    @property
    def alive(self) -> bool:
        """Whether bids out of this slice still have their hold."""
        return self.state != "closed"

    def moved(self, movement: Movement, rounds: int = 0) -> Slice:
        """This slice after the movement, and after so many rounds more were taught."""
        return Slice(
            self.id,
            self.line_item,
            self.worker,
            self.day,
            self.amount,
            self.remaining + movement.remaining,
            self.owed + movement.owed,
            self.ticked,
            self.counted + rounds,
            self.state,
        )
