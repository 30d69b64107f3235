"""A replay that stops and goes on later with little to remember, apart from its rules.

What a bid said before is told again from the stream when the bid comes up again, so that
the books stay as small as what is open, however long the stream is.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from service.ledger.replay import Replayed, Told, contradiction_costs

SUMS = ("spent", "unfunded", "disputed", "budget", "strange")


def recall(books: Replayed, entries: Sequence[Told]) -> None:
    """Remember what bids have said, in order of seq, without moving money again."""
    for kind, bid, body in entries:
        if kind in ("won", "lost", "void"):
            voided = kind == "void" and books.results.get(bid) == "won"
            books.results[bid] = "voided" if voided else kind
        elif kind == "billed":
            books.billed.add(bid)
        elif kind == "conflict" and "said" in body and contradiction_costs(books, bid, body):
            books.paid.add(bid)


def packed(books: Replayed) -> dict[str, Any]:
    """The books as JSON ready values, without what no later entry can change."""
    # A late outcome of a closed slice is told apart by nothing from one without a slice.
    slices = {name: row for name, row in books.slices.items() if not row[3] or row[2]}
    owed = {bid: [of, due] for bid, (of, due) in books.owed.items() if slices.get(of, [0] * 3)[2]}
    return {name: getattr(books, name) for name in SUMS} | {
        "slices": slices,
        "retired": sorted(books.retired & slices.keys()),
        "owed": owed,
        "days": books.days,
    }


def unpacked(body: Mapping[str, Any]) -> Replayed:
    """The books that packed() made such values of; of no values, empty books."""
    if not body:
        return Replayed()
    return Replayed(
        **{name: body[name] for name in SUMS},
        slices={name: list(row) for name, row in body["slices"].items()},
        retired=set(body["retired"]),
        owed={bid: (of, due) for bid, (of, due) in body["owed"].items()},
        days={day: list(sums) for day, sums in body["days"].items()},
    )
