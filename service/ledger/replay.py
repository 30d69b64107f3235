"""A second, deliberately simple opinion on money: the stream replayed from its facts.

It shares no code with the rules it checks; it reads what was said (kind, price, bid,
slice) and never the movements that were booked.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any


@dataclass(slots=True)
class Replayed:
    """
    Balances in nanos as the stream tells them; slices map to [amount, left, owed, closed].

    `days` map to what was spent on them: out of slices that are known, and by tickets
    without one, whose day may not have had a row yet. `owed` maps a bid to its slice and to
    what it owes; `strange` counts entries about slices that were never leased.
    """

    spent: int = 0
    held: int = 0
    unfunded: int = 0
    disputed: int = 0
    budget: int = 0
    slices: dict[str, list[int]] = field(default_factory=dict)
    owed: dict[str, tuple[str, int]] = field(default_factory=dict)
    results: dict[str, str] = field(default_factory=dict)
    billed: set[str] = field(default_factory=set)
    paid: set[str] = field(default_factory=set)
    retired: set[str] = field(default_factory=set)
    days: dict[str, list[int]] = field(default_factory=dict)
    place: tuple[str, bool] = ("", False)
    strange: int = 0


Told = tuple[str, str, Mapping[str, Any]]  # Kind, bid in hex, body.


def replay(spend_on: str, entries: Sequence[Told], before: Replayed | None = None) -> Replayed:
    """
    Replay entries in order of seq.

    Args:
        spend_on: "won" or "billed".
        before: The books that the entries before these gave; they are written on.
    """
    books = before or Replayed()
    for kind, bid, body in entries:
        _apply(books, spend_on, kind, bid, body)
    books.held = sum(left + owed for _, left, owed, _ in books.slices.values())
    return books


def _apply(books: Replayed, spend_on: str, kind: str, bid: str, body: Mapping[str, Any]) -> None:
    books.place = (body.get("day") or "", body.get("slice") is None)
    if kind == "lease":
        books.slices[body["slice"]] = [body["amount"], body["amount"], 0, 0]
    elif kind == "retire":
        _retire(books, body)
    elif kind == "close":
        _close(books, body)
    elif kind == "create":
        books.budget = body["budget"]
    elif kind == "edit":
        _edit(books, body["budget"])
    elif kind == "reversal":
        _reverse(books, body)
    elif kind == "reconcile":
        _reconcile(books, body["spent"])
    elif kind in ("won", "lost", "void", "billed"):
        _outcome(books, spend_on, kind, bid, body)
    elif kind == "conflict" and "said" in body:
        _conflict(books, bid, body)


def _retire(books: Replayed, body: Mapping[str, Any]) -> None:
    row = books.slices.get(body["slice"])
    if row is None:
        books.strange += 1
    # A slice is put down once; whoever books it again would free money that is not there.
    elif body["slice"] not in books.retired:
        books.retired.add(body["slice"])
        row[1] -= body["freed"]


def _close(books: Replayed, body: Mapping[str, Any]) -> None:
    row = books.slices.get(body["slice"])
    if row is None:
        books.strange += 1
        return
    row[1], row[2], row[3] = row[1] - body["released"], row[2] - body["unbilled"], 1


def _edit(books: Replayed, budget: int) -> None:
    held = sum(left + owed for _, left, owed, _ in books.slices.values())
    funded = min(books.unfunded, max(0, budget - books.spent - held))
    books.spent, books.unfunded = books.spent + funded, books.unfunded - funded
    books.budget = budget


def _reverse(books: Replayed, body: Mapping[str, Any]) -> None:
    """A refund pays what found no money first, and only then lowers spend and its day."""
    debt = min(books.unfunded, body["amount"])
    books.unfunded, rest = books.unfunded - debt, body["amount"] - debt
    books.spent -= rest
    if body["slice"] is not None:
        day = books.days.setdefault(body["day"], [0, 0])
        day[0] -= min(rest, day[0])


def _reconcile(books: Replayed, spent: int) -> None:
    """What was confirmed beyond the books is spent as far as there is money for it."""
    held = sum(left + owed for _, left, owed, _ in books.slices.values())
    missing = spent - books.spent - books.unfunded
    inside = min(missing, max(0, books.budget - books.spent - held))
    books.spent, books.unfunded = books.spent + inside, books.unfunded + missing - inside


def _outcome(books: Replayed, spend_on: str, kind: str, bid: str, body: Mapping[str, Any]) -> None:
    row = books.slices.get(body["slice"] or "")
    hold, price = body["bid"], body["price"] or 0
    if kind == "billed":
        _bill(books, spend_on, bid, row, hold, price)
        return
    if kind == "void" and books.results.get(bid) == "won":
        books.results[bid] = "voided"
        _drop_owed(books, bid, row)
        return
    books.results[bid] = kind
    # The bill has paid and taken the hold already.
    if bid in books.billed:
        return
    if row is not None and not row[3]:
        row[1] -= hold
        if kind == "won" and spend_on == "billed":
            books.owed[bid] = body["slice"], min(price, hold)
            row[2] += min(price, hold)
        elif kind == "won":
            _pay(books, min(price, hold), price - hold, funded=True)
    elif kind == "won" and spend_on == "won":
        _pay(books, min(price, hold), price - hold, funded=_fits(books, min(price, hold)))


def _bill(
    books: Replayed, spend_on: str, bid: str, row: list[int] | None, hold: int, price: int
) -> None:
    books.billed.add(bid)
    if bid not in books.results:
        if row is not None and not row[3]:
            row[1] -= hold
            _pay(books, min(price, hold), price - hold, funded=True)
        else:
            _pay(books, min(price, hold), price - hold, funded=_fits(books, min(price, hold)))
        return
    if spend_on == "won":
        return
    _, owed = books.owed.pop(bid, ("", 0))
    # Billing grace has dropped what it owed; the rest belongs to other bids of the slice.
    if row is None or row[2] < owed:
        owed = 0
    if row is not None:
        row[2] -= owed
    inside = min(price, owed)
    _pay(books, inside, price - hold, funded=True)
    beyond = max(0, min(price, hold) - owed)
    if beyond:
        _pay(books, beyond, 0, funded=_fits(books, beyond))


def _conflict(books: Replayed, bid: str, body: Mapping[str, Any]) -> None:
    if not contradiction_costs(books, bid, body):
        return
    hold, price = body["bid"], body["price"] or 0
    books.paid.add(bid)
    _pay(books, min(price, hold), price - hold, funded=_fits(books, min(price, hold)))


def contradiction_costs(books: Replayed, bid: str, body: Mapping[str, Any]) -> bool:
    """Whether it costs, once: a win after a loss, or billing of what was not won."""
    unpaid = {"won": ("lost", "void"), "billed": ("lost", "void", "voided")}
    result = books.results.get(bid)
    known = bid in books.paid or bid in books.billed
    return not known and result in unpaid.get(body["said"], ())


def _drop_owed(books: Replayed, bid: str, row: list[int] | None) -> None:
    _, owed = books.owed.pop(bid, ("", 0))
    if row is not None and row[2] >= owed:
        row[2] -= owed


def _fits(books: Replayed, cost: int) -> bool:
    held = sum(left + owed for _, left, owed, _ in books.slices.values())
    # `budget` is a target here, and the real bound is never below what is out already.
    return books.spent + held + cost <= max(books.budget, books.spent + held)


def _pay(books: Replayed, cost: int, excess: int, *, funded: bool) -> None:
    if funded:
        day, unsure = books.place
        books.spent += cost
        books.days.setdefault(day, [0, 0])[unsure] += cost
    else:
        books.unfunded += cost
    books.disputed += max(0, excess)
