"""Times as callers write and read them, and as we keep them: milliseconds since 1970."""

from __future__ import annotations

import datetime
import re
import time

_TIME = re.compile(
    r"[0-9]{4}-[0-9]{2}-[0-9]{2}T[0-9]{2}:[0-9]{2}:[0-9]{2}(\.[0-9]{1,9})?"
    r"(Z|[+-][0-9]{2}:[0-9]{2})"
)
_EPOCH = datetime.datetime(1970, 1, 1, tzinfo=datetime.UTC)
_MILLISECOND = datetime.timedelta(milliseconds=1)
DAY_MS = 86_400_000
_YEARS = range(2000, 2200)  # Far from where a change of zone leaves the calendar.


def milliseconds(text: object) -> int:
    """
    Read an RFC 3339 time with its zone as milliseconds since 1970, rounded down.

    Raises:
        ValueError: Another form, no such time, or a year outside 2000 to 2199.
    """
    # RFC 3339 allows t and z in lower case.
    if not isinstance(text, str) or not _TIME.fullmatch(text.upper()):
        raise ValueError("It must be a time with a zone, such as 2026-12-01T09:00:00Z.")
    try:
        moment = datetime.datetime.fromisoformat(text.upper())
    except ValueError as error:
        raise ValueError("There is no such time.") from error
    if moment.year not in _YEARS:
        raise ValueError("The year must lie between 2000 and 2199.")
    return (moment - _EPOCH) // _MILLISECOND


def now_ms() -> int:
    """The wall clock in milliseconds since 1970."""
    return time.time_ns() // 1_000_000


def start_of_today_ms() -> int:
    """When today began, in UTC."""
    now = now_ms()
    return now - now % DAY_MS


def time_text(moment_ms: int) -> str:
    """Milliseconds since 1970 as an RFC 3339 time in UTC."""
    moment = _EPOCH + datetime.timedelta(milliseconds=moment_ms)
    timespec = "milliseconds" if moment_ms % 1000 else "seconds"
    return moment.isoformat(timespec=timespec).replace("+00:00", "Z")
