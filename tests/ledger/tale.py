"""Money told line by line: each event of a few bids with its status and the balances after it.

A line is `event -> status name=amount …`; balances that a line does not name must not move.
"""

from __future__ import annotations

from typing import Any

from service.ledger.accounts import NO_LIMIT, Account, Day, Movement, Slice
from service.ledger.budgets import set_budget, set_day_budget
from service.ledger.replay import replay
from service.ledger.settle import Outcome, Place, settle

NAMES = ("spent", "held", "unfunded", "disputed", "owed", "day", "over")


class Tale:
    """
    One line item and its slices, moved by the pure rules alone.

    Args:
        spend_on: "won" or "billed".
        budget: Nanos.
    """

    def __init__(self, spend_on: str, budget: int) -> None:
        self.spend_on = spend_on
        self.account = Account("x", budget, budget, 0, 0, 0, 0, 0, 0)
        self.day: Day = Day("x", "2026-12-01", NO_LIMIT, NO_LIMIT, 0, 0, 0)
        self.slices: dict[str, Slice] = {}
        self.issued: dict[str, list[int]] = {}
        self.bids: dict[str, tuple[str | None, int, int]] = {}
        self.slots: dict[str, dict[str, tuple[str, dict[str, Any]]]] = {}
        self.entries: list[tuple[str, str, dict[str, Any]]] = [("create", "", {"budget": budget})]
        self.cost = 0

    def balances(self) -> dict[str, int]:
        """Every sum a line may name, in nanos."""
        account, day = self.account, self.day
        owed = sum(s.owed for s in self.slices.values())
        sums = (account.spent, account.held, account.unfunded, account.disputed)
        return dict(zip(NAMES, (*sums, owed, day.spent, day.over_spent), strict=True))

    def tell(self, event: str) -> str:
        """Let one event happen; returns its status, or - for what has none."""
        verb, name, *rest = event.split()
        doing = getattr(self, f"_{verb}", None)
        if doing is None:
            return self._outcome(verb, name, [int(word) for word in rest])
        doing(name, *rest)
        return "-"

    def faults(self) -> list[str]:
        """What is broken of the promise now."""
        held = sum(s.remaining + s.owed for s in self.slices.values())
        account, told = self.account, replay(self.spend_on, self.entries)
        claims = {
            "V1": account.spent + account.held <= account.budget,
            "V1 day": self.day.spent + self.day.held <= self.day.budget,
            "V2": account.held == held == self.day.held,
            "V3": self.cost == account.spent + account.unfunded + account.disputed,
            "V6": all(
                s.remaining >= 0 and s.owed >= 0 and s.remaining + s.owed <= s.amount
                for s in self.slices.values()
            ),
            "V7": (told.spent, told.held, told.unfunded, told.disputed)
            == (account.spent, account.held, account.unfunded, account.disputed),
        }
        return [claim for claim, holds in claims.items() if not holds]

    def _move(self, movement: Movement, of: str | None) -> None:
        self.account = self.account.moved(movement)
        self.day = self.day.moved(movement)
        self.cost += movement.cost
        if of is not None:
            self.slices[of] = self.slices[of].moved(movement)

    def _budget(self, amount: str) -> None:
        self.account = set_budget(self.account, int(amount))
        self.entries.append(("edit", "", {"budget": int(amount)}))

    def _daily(self, amount: str) -> None:
        self.day = set_day_budget(self.day, int(amount))

    def _lease(self, name: str, amount: str) -> None:
        sums = (int(amount), int(amount), 0, 0, 0)
        self.slices[name] = Slice(name.encode(), "x", "w", self.day.day, *sums, "open")
        self.issued[name] = []
        self._move(Movement(held=int(amount)), None)
        self.entries.append(("lease", "", {"slice": name, "amount": int(amount)}))

    def _bid(self, name: str, of: str, hold: str) -> None:
        self.bids[name] = (of, len(self.issued[of]), int(hold))
        self.issued[of].append(int(hold))

    def _foreign(self, name: str) -> None:
        _, counter, hold = self.bids[name]
        self.bids[name] = (None, counter, hold)

    def _retire(self, name: str) -> None:
        freed = self.slices[name].amount - sum(self.issued[name])
        self.slices[name] = self.slices[name]._replace(state="retired")
        self._move(Movement(held=-freed, remaining=-freed), name)
        self.entries.append(("retire", "", {"slice": name, "freed": freed}))

    def _close(self, name: str, *and_bills: str) -> None:
        released = self.slices[name].remaining
        unbilled = self.slices[name].owed if and_bills else 0
        self.slices[name] = self.slices[name]._replace(state="closed")
        gone = Movement(held=-released - unbilled, remaining=-released, owed=-unbilled)
        self._move(gone, name)
        body = {"slice": name, "released": released, "unbilled": unbilled}
        self.entries.append(("close", "", body))

    def _outcome(self, kind: str, name: str, prices: list[int]) -> str:
        of, counter, hold = self.bids[name]
        given: dict[str, Any] = {
            "price" if kind in ("won", "billed") else "to_win": p for p in prices
        }
        outcome = Outcome(kind, name.encode(), counter, hold, "default", **given)
        slots = self.slots.setdefault(name, {})
        place = Place(self.account, self.day, self.slices[of] if of else None, slots, self.spend_on)
        verdict = settle(outcome, place)
        self._move(verdict.movement, of)
        entry = verdict.entry
        if entry is not None and entry.slot is not None:
            if entry.slot in slots:
                raise ValueError(f"{entry.slot} is taken")  # As the unique index would say.
            slots[entry.slot] = (entry.kind, dict(entry.body))
            self.entries.append((entry.kind, name, {**entry.body, "slice": of}))
        return verdict.status
