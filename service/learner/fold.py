"""The pure fold from stream entries to a tally, apart from what the sums are used for.

No clock, no chance, no storage, integers only: between two resets the order of entries
does not matter, so a rebuild from zero gives the same bytes as learning piece by piece.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from typing import Any

from service.learner.tally import NAMES, Tally

Body = Mapping[str, Any]
Sums = dict[str, int]

ONCE = "once"
ACCRUES = "accrues"


def fold(tally: Tally, entries: Iterable[tuple[str, Body]], ceiling: int, arrival: str) -> Tally:
    """
    Add entries to a tally; kinds that teach nothing are passed over.

    Entries keep raw amounts and are cut at the ceiling here, so a changed ceiling refolds.

    Args:
        tally: The sums so far; never changed.
        entries: Kind and body of each, in the order of the stream.
        ceiling: Largest value of one win in nanos.
        arrival: "once" (the first value of a win is its whole value) or "accrues" (a win is
            known when its window has closed, with nothing or with all that came).
    """
    sums = _sums(tally)
    for kind, body in entries:
        if kind == "reset":
            sums = _sums(Tally.fresh())
        elif kind in LESSONS:
            LESSONS[kind](sums, body, ceiling, arrival)
    return Tally(**sums)


def _sums(tally: Tally) -> Sums:
    return {name: getattr(tally, name) for name in NAMES}


def _won(sums: Sums, body: Body, ceiling: int, arrival: str) -> None:
    sums["wins"] += 1
    sums["late"] += bool(body.get("late"))
    sums["paid"] += body["price"]
    sums["rounds"] += body["round"]


def _lost(sums: Sums, body: Body, ceiling: int, arrival: str) -> None:
    sums["losses"] += 1
    sums["rounds"] += body["round"]


def _void(sums: Sums, body: Body, ceiling: int, arrival: str) -> None:
    sums["voids"] += 1
    sums["rounds"] += body["round"]


def _rounds(sums: Sums, body: Body, ceiling: int, arrival: str) -> None:
    sums["rounds"] += body["rounds"] + body["under_floor"]
    sums["under_floor"] += body["under_floor"]


def _value(sums: Sums, body: Body, ceiling: int, arrival: str) -> None:
    was = body["was"]
    sums["values_seen"] += was is None
    if arrival != ONCE or body.get("before_reset"):
        return
    if was is None:
        sums["known"] += 1
    else:
        _add_amount(sums, was, ceiling, -1)
    _add_amount(sums, body["amount"], ceiling, 1)


def _matured(sums: Sums, body: Body, ceiling: int, arrival: str) -> None:
    if arrival != ACCRUES:
        return
    sums["known"] += body["wins"]
    for amount in body["amounts"]:
        _add_amount(sums, amount, ceiling, 1)


def _add_amount(sums: Sums, raw: int, ceiling: int, times: int) -> None:
    amount = min(raw, ceiling)
    sums["converted"] += times * (amount > 0)
    sums["amount"] += times * amount
    sums["amount_square"] += times * amount * amount
    sums["clipped"] += times * (raw > ceiling)


LESSONS: dict[str, Callable[[Sums, Body, int, str], None]] = {
    "won": _won,
    "lost": _lost,
    "void": _void,
    "tick": _rounds,
    "retire": _rounds,
    "value": _value,
    "matured": _matured,
}
