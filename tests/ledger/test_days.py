"""Local days in every zone: 23, 24 and 25 hours, midnights that are jumped over or come twice."""

from __future__ import annotations

from datetime import date, datetime, timedelta
from zoneinfo import ZoneInfo, available_timezones

import pytest
from hypothesis import example, given
from hypothesis import strategies as some

from service.ledger.days import left_ms, local_day


def ms(text: str, zone: str = "UTC") -> int:
    """Milliseconds of a local time; the first one where it comes twice."""
    local = datetime.fromisoformat(text).replace(tzinfo=ZoneInfo(zone))
    return int(local.timestamp() * 1000)


HOUR_MS = 3_600_000
ZONES = sorted(available_timezones())

moments = some.integers(ms("1995-01-01T00:00"), ms("2037-12-31T00:00"))


@pytest.mark.parametrize(
    ("zone", "noon", "hours"),
    [
        ("UTC", "2026-03-29", 24),
        ("Europe/Vienna", "2026-03-28", 24),
        ("Europe/Vienna", "2026-03-29", 23),
        ("Europe/Vienna", "2026-10-25", 25),
        ("America/New_York", "2026-03-08", 23),
        ("America/New_York", "2026-11-01", 25),
        ("Australia/Lord_Howe", "2026-10-04", 23.5),
        ("Asia/Kathmandu", "2026-10-25", 24),
        ("Africa/Cairo", "2024-04-26", 23),  # No midnight: the clocks jump from it to one.
        ("America/Sao_Paulo", "2018-11-04", 23),
        ("America/Sao_Paulo", "2018-02-17", 25),  # The last hour of the day comes twice.
        ("America/Havana", "2024-11-03", 25),  # The first hour of the day comes twice.
    ],
)
def test_the_length_of_a_day(zone: str, noon: str, hours: float) -> None:
    """From its first to its last moment a day has the hours its zone gives it."""
    at, day_ms = ms(f"{noon}T12:00", zone), int(hours * HOUR_MS)
    end = at + left_ms(at, zone)

    assert local_day(end - 1, zone) == noon
    assert local_day(end, zone) > noon
    assert local_day(end - day_ms, zone) == noon
    assert local_day(end - day_ms - 1, zone) < noon
    assert left_ms(end - day_ms, zone) == day_ms


def test_a_day_that_a_zone_left_out_is_passed_over() -> None:
    """Samoa had no 30 December 2011: the day before ends where the day after begins."""
    at = ms("2011-12-29T12:00", "Pacific/Apia")

    assert left_ms(at, "Pacific/Apia") == 12 * HOUR_MS
    assert local_day(at + 12 * HOUR_MS, "Pacific/Apia") == "2011-12-31"


def test_a_midnight_that_comes_twice_ends_the_day_twice() -> None:
    """In Newfoundland the clocks went from 00:01 back to 23:01, so a day was taken up again."""
    zone = "America/St_Johns"
    midnight = ms("2010-11-07T00:00", zone)

    assert left_ms(midnight - 1, zone) == 1
    assert local_day(midnight, zone) == "2010-11-07"
    assert local_day(midnight + 60_000, zone) == "2010-11-06"
    assert left_ms(midnight + 60_000, zone) == 59 * 60_000


@given(moments, some.sampled_from(ZONES))
@example(ms("2010-11-07T02:45"), "America/St_Johns")
def test_a_day_ends_when_its_date_ends(at: int, zone: str) -> None:
    """The last millisecond belongs to the day, the next one does not, in any zone and year."""
    left = left_ms(at, zone)

    assert 0 < left <= 27 * HOUR_MS
    assert local_day(at + left - 1, zone) == local_day(at, zone)
    assert local_day(at + left, zone) != local_day(at, zone)


@pytest.mark.parametrize(
    "zone", ["Europe/Vienna", "America/New_York", "Africa/Cairo", "Asia/Tokyo"]
)
def test_the_days_of_a_year_follow_each_other(zone: str) -> None:
    """Going from end to end visits every date of a year once and adds up to its hours."""
    at, day = ms("2026-01-01T00:00", zone), date(2026, 1, 1)
    while day.year == 2026:
        assert local_day(at, zone) == day.isoformat()
        at, day = at + left_ms(at, zone), day + timedelta(days=1)

    assert at == ms("2027-01-01T00:00", zone)
