"""What must hold after a drill, by the database itself and by the books of the other side."""

from __future__ import annotations

from bisect import bisect_left
from collections import Counter
from collections.abc import Sequence

from sqlalchemy import text

from service.commands.drill_record import History
from service.guard.ticket import bid_of
from service.store.audit import audit
from service.store.database import Database, Reading

Slot = tuple[bytes, str]


def judge(history: History, database: Database, grace_s: float) -> list[str]:
    """Every broken promise, in words; an empty list when all are kept."""
    booked = database.read(_booked)
    found = database.read(audit)
    return [
        *history.faults,
        *_of_outcomes(history, booked),
        *_of_money(history, database.read(_balances), grace_s),
        *(f"audit: {f.line_item}: {f.check}: off by {f.off}" for f in found),
    ]


def held(database: Database) -> int:
    """All that is held, in nanos."""
    statement = text("SELECT coalesce(sum(held), 0) FROM balance")
    return database.read(lambda c: int(c.execute(statement).scalar_one()))


def recovery_s(back_s: Sequence[float], answers_s: list[float]) -> list[float]:
    """From each return of the database to the next receipt, in seconds."""
    after = [(back, bisect_left(answers_s, back)) for back in back_s]
    return [answers_s[place] - back for back, place in after if place < len(answers_s)]


def _of_outcomes(history: History, booked: Counter[Slot]) -> list[str]:
    # By place in the stream, as one bid may have a result and many values.
    sent = {(bid_of(row.ref), row.slot): row for row in history.sent}
    lost = [r for slot, r in sent.items() if r.acknowledged_s is not None and booked[slot] != 1]
    often = [row for slot, row in sent.items() if booked[slot] > 1]
    untold = [row for slot, row in sent.items() if not row.tries and booked[slot]]
    return [
        *(f"lost: {row.ref} {row.kind} was acknowledged" for row in lost),
        *(f"twice: {row.ref} {row.kind}" for row in often),
        *(f"invented: {row.ref} {row.kind} was never told" for row in untold),
        *(f"invented: {bid.hex()} {slot}" for bid, slot in booked.keys() - sent.keys()),
    ]


def _of_money(history: History, balances: dict[str, dict[str, int]], grace_s: float) -> list[str]:
    faults = []
    for name, books in balances.items():
        cost, charged = (
            books["spent"] + books["unfunded"] + books["disputed"],
            history.charged[name],
        )
        if cost != charged:
            faults.append(f"{name}: the exchange charged {charged}, we booked {cost}")
        # After grace a slice may be closed, and a win that comes then has no money waiting.
        if books["unfunded"] and history.delay_s_max < grace_s:
            faults.append(f"{name}: {books['unfunded']} is unfunded though nothing was late")
        if books["held"]:
            faults.append(f"{name}: {books['held']} is still held after grace")
    return faults


def _booked(connection: Reading) -> Counter[Slot]:
    rows = connection.execute(text("SELECT bid, slot FROM stream WHERE slot IS NOT NULL"))
    return Counter((bytes(row.bid), row.slot) for row in rows)


def _balances(connection: Reading) -> dict[str, dict[str, int]]:
    rows = connection.execute(
        text("SELECT line_item, budget, spent, held, unfunded, disputed FROM balance")
    )
    return {row.line_item: dict(row._mapping) for row in rows}
