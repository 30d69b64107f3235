"""How the page writes amounts, prices, moments and ages: each number with its unit; pure."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo

from service.judging import Alarm

NANOS = 10**9
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_AGES = ((86_400, "d"), (3600, "h"), (60, "min"))
STATUS = {
    "bids": "bidding",
    "frozen": "frozen",
    "halted": "learner halted",
    "spent": "money gone",
    "resting": "outside flight",
    "closed": "closed",
    "waits": "waits for its spend",
}
SET_BY = {
    "value": "the value",
    "cap": "the cap",
    "floor": "the floor",
    "pacing": "pacing",
    "allowance": "the allowance",
    "money_in_hand": "money in hand",
    "return_target": "the return target",
    "control": "the control share",
}
PASSES = {
    "frozen": "frozen",
    "out_of_flight": "outside its flight",
    "budget_spent": "budget spent",
    "day_spent": "day's money spent",
    "past_deadline": "past the deadline",
    "overloaded": "overloaded",
    "learner_halted": "learner halted",
    "no_value": "value not known yet",
    "price_rounds_to_zero": "price rounds to zero",
    "under_floor": "under the floor",
    "outbid_inside": "another line item bid",
    "budget_held": "budget held by open bids",
    "no_rate": "no rate for its currency",
}


def amount(nanos: int | None, currency: str) -> str:
    """An amount with its currency: two decimals, or three digits where it is small."""
    return "none" if nanos is None else f"{_number(nanos / NANOS)} {currency}"


def cpm(price_nanos: int | None, currency: str) -> str:
    """A price per impression as CPM."""
    return "none" if price_nanos is None else f"{_number(price_nanos / 10**6)} {currency} CPM"


def cpm_plain(price_nanos: int | None) -> str:
    """The same under a heading that names the unit."""
    return "none" if price_nanos is None else _number(price_nanos / 10**6)


def share(part: int, whole: int) -> str:
    """A share in per cent, with what it is a share of."""
    return f"{100 * part / whole:.0f} % of {whole:,}" if whole else "no bids"


def age(moment_ms: int | None, now_ms: int) -> str:
    """How long ago a moment was, in the largest unit that leaves at least one."""
    if moment_ms is None:
        return "none"
    seconds = max(0, now_ms - moment_ms) // 1000
    for size, unit in _AGES:
        if seconds >= size:
            return f"{seconds // size} {unit}"
    return f"{seconds} s"


def moment(at_ms: int | None, zone: str, now_ms: int | None = None) -> str:
    """A moment in a zone and in UTC; the day too when it is not today."""
    if at_ms is None:
        return "none"
    at = _EPOCH + timedelta(milliseconds=at_ms)
    local = at.astimezone(ZoneInfo(zone))
    today = (
        now_ms is not None
        and local.date()
        == (_EPOCH + timedelta(milliseconds=now_ms)).astimezone(ZoneInfo(zone)).date()
    )
    form = "%H:%M:%S" if today else "%Y-%m-%d %H:%M:%S"
    if zone == "UTC":
        return f"{local:{form}} UTC"
    return f"{local:{form}} {zone.rpartition('/')[2].replace('_', ' ')} ({at:%H:%M:%S} UTC)"


def typed(at_ms: int) -> str:
    """A moment as the forms of orders take it."""
    return (_EPOCH + timedelta(milliseconds=at_ms)).isoformat(timespec="milliseconds")[:-6] + "Z"


def sentence(alarm: Alarm) -> str:
    """What somebody must know in the first ten seconds, as one sentence."""
    if alarm.total == 0:
        return "There are no line items yet."
    items = "line items needs" if alarm.needing == 1 else "line items need"
    if alarm.needing == 0:
        said = f"None of {alarm.total:,} line items needs you"
    elif alarm.total == 1:
        said = "The one line item needs you"
    else:
        said = f"{alarm.needing:,} of {alarm.total:,} {items} you"
    stakes = [amount(nanos // 60, currency) for currency, nanos in alarm.stakes.items() if nanos]
    said += f"; {' and '.join(stakes)} a minute at stake" if stakes else ""
    if alarm.stopped_by_people:
        said += f"; {alarm.stopped_by_people:,} frozen by people"
    return said + "."


def sentences(said: str) -> str:
    """Words of a tripwire as they begin and end a sentence."""
    return said[:1].upper() + said[1:].rstrip(".") + "."


def amounts(by_currency: Mapping[str, int]) -> str:
    """Amounts of several currencies side by side, never added."""
    said = [amount(nanos, currency) for currency, nanos in by_currency.items()]
    return " and ".join(said) if said else "nothing"


def filters() -> dict[str, Any]:
    """What templates may call."""
    return {
        **{"amount": amount, "cpm": cpm, "share": share, "age": age, "moment": moment},
        "amounts": amounts,
        **{"typed": typed, "sentences": sentences},
        "cpm_plain": cpm_plain,
        "status": lambda status: STATUS.get(status, status),
        "set_by": lambda name: SET_BY.get(name, name or "nothing yet"),
        "passed": lambda name: PASSES.get(name, name or "none"),
    }


def _number(number: float) -> str:
    if number == 0 or abs(number) >= 1:
        return f"{number:,.2f}"
    # Three digits that say something: a price of 0.00 CPM would be a lie.
    text = f"{number:.3g}"
    text = f"{number:.9f}".rstrip("0") if "e" in text else text
    return text.ljust(4 if number > 0 else 5, "0")
