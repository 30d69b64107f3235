"""Local days: where a daily budget begins and ends, in the line item's own zone."""

from __future__ import annotations

from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


def local_day(wall_ms: int, zone: str) -> str:
    """The date at this moment in the zone, such as 2026-12-01."""
    return _local(wall_ms, zone).date().isoformat()


def left_ms(wall_ms: int, zone: str) -> int:
    """Milliseconds until the local day ends; 23 and 25 hour days are what they are."""
    tomorrow = _local(wall_ms, zone).date() + timedelta(days=1)
    begins = _begins_ms(tomorrow, zone)
    if begins <= wall_ms:  # Its midnight comes twice, and this is the day taken up again.
        begins = _begins_ms(tomorrow, zone, fold=1)
    return begins - wall_ms


def _local(wall_ms: int, zone: str) -> datetime:
    return (EPOCH + timedelta(milliseconds=wall_ms)).astimezone(ZoneInfo(zone))


def _begins_ms(day: date, zone: str, fold: int = 0) -> int:
    """The first moment of a day; a midnight that the clocks jump over maps to the jump."""
    midnight = datetime(day.year, day.month, day.day, tzinfo=ZoneInfo(zone), fold=fold)
    return (midnight.astimezone(UTC) - EPOCH) // timedelta(milliseconds=1)
