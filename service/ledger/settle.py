"""What a won, lost, void or billed outcome does to money: the table of the promise, as code.

Every function is pure. A bid has the slots `result` (won, lost, void) and `billed`;
the first content of a slot stands, other content is a conflict kept beside it.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

from service.ledger.accounts import NOTHING, Account, Day, Movement, Slice
from service.ledger.entries import PAYING, Body, Entry, conflict
from service.ledger.late import late_cost

Slots = Mapping[str, tuple[str, Body]]  # slot -> (kind, body) of what is already there


class Outcome(NamedTuple):
    """One reported event of one bid; prices in nanos per impression."""

    kind: str
    bid: bytes
    counter: int
    hold: int
    source: str
    price: int | None = None
    to_win: int | None = None
    why: str | None = None
    at: str | None = None
    auction: str = "second"


class Place(NamedTuple):
    """Where an outcome lands; `slice` is None when it is unknown or of another incarnation."""

    account: Account
    day: Day | None
    slice: Slice | None
    slots: Slots
    spend_on: str

    @property
    def alive(self) -> bool:
        """Whether the bid still has its hold."""
        return self.slice is not None and self.slice.alive


class Verdict(NamedTuple):
    """The receipt's status, the money that moves, the entry to append, rounds newly counted."""

    status: str
    movement: Movement = NOTHING
    entry: Entry | None = None
    rounds: int = 0


def settle(outcome: Outcome, place: Place) -> Verdict:
    """Decide one outcome; the caller holds the lock of the line item's balance."""
    # Billing has a slot of its own, since it may come before, after or without the win notice.
    if outcome.kind == "billed":
        return _billed(outcome, place)
    taken = place.slots.get("result")
    if taken is None:
        return _first_result(outcome, place)
    # A void after an unbilled win fills a slot of its own, and a repeat of either may come.
    if any(_same(place.slots[slot], outcome) for slot in ("result", "void") if slot in place.slots):
        return Verdict("duplicate")
    if outcome.kind == "void" and _unbilled_win(taken, place):
        return _void_of_win(outcome, place, taken[1])
    return _contradiction(outcome, place, pays=outcome.kind == "won" and taken[0] != "won")


def _first_result(outcome: Outcome, place: Place) -> Verdict:
    # What was billed is paid already: a win after it only teaches, anything else contradicts it.
    billed_before = "billed" in place.slots
    if billed_before and outcome.kind != "won":
        return _contradiction(outcome, place, pays=False)
    movement = NOTHING if billed_before else _first_movement(outcome, place)
    rounds = counted(outcome, place.slice)
    body = result_body(outcome, rounds, movement.owed, late=not place.alive)
    entry = Entry(outcome.kind, body, outcome.bid, "result", movement.cost)
    return Verdict("recorded" if place.alive else "late", movement, entry, rounds)


def _first_movement(outcome: Outcome, place: Place) -> Movement:
    if place.alive:
        return of_open(outcome.hold, *shares(outcome, place.spend_on))
    # Its hold is gone, and a win alone is not spend here: the bill will take the late way.
    if outcome.kind != "won" or place.spend_on == "billed":
        return NOTHING
    return _pay(outcome, place)


def shares(outcome: Outcome, spend_on: str) -> tuple[int, int, int]:
    """What a hold turns into: its cost, what it owes, and what the price asks beyond the bid."""
    if outcome.kind not in PAYING:
        return 0, 0, 0
    price, hold = outcome.price or 0, outcome.hold
    if spend_on == "billed":
        return 0, min(price, hold), 0
    return min(price, hold), 0, max(0, price - hold)


def of_open(hold: int, cost: int, owed: int, excess: int) -> Movement:
    """What bids with a hold move: it becomes cost, or owed, or free; an excess is disputed."""
    return Movement(
        spent=cost, held=owed - hold, remaining=-hold, owed=owed, day_spent=cost, disputed=excess
    )


def _pay(outcome: Outcome, place: Place) -> Movement:
    """Turn a hold into spend; what the price asks beyond the bid is disputed."""
    cost, _, excess = shares(outcome, "won")
    if not place.alive:
        return late_cost(place.account, place.day, cost) + Movement(disputed=excess)
    return of_open(outcome.hold, cost, 0, excess)


def _billed(outcome: Outcome, place: Place) -> Verdict:
    taken, result = place.slots.get("billed"), place.slots.get("result")
    if taken is not None:
        if _same(taken, outcome):
            return Verdict("duplicate")
        return _contradiction(outcome, place, pays=False)
    if result is None:
        # No win notice has come: the bill proves the win as well.
        movement = _pay(outcome, place)
    elif result[0] != "won" or "void" in place.slots:
        return _contradiction(outcome, place, pays=True)
    elif place.spend_on == "won":
        movement = NOTHING
    else:
        movement = _billing(outcome, place, result[1])
    status = "recorded" if place.alive or result is not None else "late"
    # The win or a tick counts the round, and a bill must not count it again.
    body = _said(outcome) | {"late": not place.alive, "round": 0}
    return Verdict(status, movement, Entry("billed", body, outcome.bid, "billed", movement.cost))


def _billing(outcome: Outcome, place: Place, win: Body) -> Movement:
    """Billing after a win that owes: pay what was set aside, an excess goes the late way."""
    price, owed = outcome.price or 0, int(win["owed"])
    # Billing grace may have dropped what was owed; then nothing is set aside any more.
    if place.slice is None or place.slice.owed < owed or owed == 0:
        owed = 0
    inside = min(price, owed)
    beyond = max(0, min(price, outcome.hold) - owed)
    paid = Movement(spent=inside, held=-owed, owed=-owed, day_spent=inside)
    disputed = Movement(disputed=max(0, price - outcome.hold))
    if not beyond:
        return paid + disputed
    # The late way decides on the money as it is after the part that was set aside is paid.
    account = place.account.moved(paid)
    day = place.day.moved(paid) if place.day else None
    return paid + disputed + late_cost(account, day, beyond)


def _unbilled_win(taken: tuple[str, Body], place: Place) -> bool:
    unbilled = "billed" not in place.slots and "void" not in place.slots
    return place.spend_on == "billed" and taken[0] == "won" and unbilled


def _void_of_win(outcome: Outcome, place: Place, win: Body) -> Verdict:
    owed = int(win["owed"])
    has_owed = place.slice is not None and place.slice.owed >= owed > 0
    movement = Movement(held=-owed, owed=-owed) if has_owed else NOTHING
    body = _said(outcome) | {"round": 0, "late": not place.alive}
    return Verdict("recorded", movement, Entry("void", body, outcome.bid, "void"))


def _contradiction(outcome: Outcome, place: Place, *, pays: bool) -> Verdict:
    """Keep what contradicts beside what stands; a win we had not booked may cost money."""
    entry = conflict(outcome.bid, _said(outcome))
    # An exchange may resend the same contradiction for days; it is kept once.
    if entry.slot in place.slots:
        return Verdict("conflict")
    movement, costs = NOTHING, pays and not _paid_by_conflict(place.slots)
    if costs:
        price = outcome.price or 0
        movement = late_cost(place.account, place.day, min(price, outcome.hold))
        movement += Movement(disputed=max(0, price - outcome.hold))
    body = {**entry.body, "pays": costs}
    kept = Entry("conflict", body, outcome.bid, entry.slot, movement.cost)
    return Verdict("conflict", movement, kept)


def _paid_by_conflict(slots: Slots) -> bool:
    """Whether an earlier contradiction of this bid was already paid: one bid costs once."""
    return any(kind == "conflict" and body.get("pays") for kind, body in slots.values())


def counted(outcome: Outcome, slice_: Slice | None) -> int:
    """One round unless a tick has reported this bid already."""
    # Bids of a slice are counted from 0, so a tick of n bids has covered those below n.
    return int(slice_ is not None and outcome.counter >= slice_.ticked)


def _said(outcome: Outcome) -> dict[str, object]:
    return {
        "said": outcome.kind,
        "price": outcome.price,
        "to_win": outcome.to_win,
        "bid": outcome.hold,
        "counter": outcome.counter,
        "source": outcome.source,
        "auction": outcome.auction,
        "why": outcome.why,
        "at": outcome.at,
    }


def result_body(outcome: Outcome, rounds: int, owed: int, *, late: bool) -> dict[str, object]:
    """What is kept of a first result."""
    body = _said(outcome)
    # What it owes is kept with the win, for the slice only knows the sum of all its bids.
    body["round"], body["late"], body["owed"] = rounds, late, owed
    return body


def _same(taken: tuple[str, Body], outcome: Outcome) -> bool:
    # When it happened and why are not content: a resend may name another moment.
    _, body = taken
    content = (body["said"], body["price"], body["to_win"])
    return content == (outcome.kind, outcome.price, outcome.to_win)
