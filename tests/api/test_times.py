"""Times are read with their zone and come back as they left."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.api.times import milliseconds, time_text


@pytest.mark.parametrize(
    ("text", "moment_ms"),
    [
        ("1999-12-31T23:59:59Z", None),
        ("2000-01-01T00:00:00Z", 946_684_800_000),
        ("2026-12-01t09:00:00z", 1_796_115_600_000),
        ("2026-12-01T09:00:00.1239Z", 1_796_115_600_123),
        ("2026-12-01T10:00:00+01:00", 1_796_115_600_000),
        ("2026-12-01T09:00:00", None),
        ("2026-12-01 09:00:00Z", None),
        ("2026-02-30T09:00:00Z", None),
        ("2026-12-01T09:00:60Z", None),
        ("2200-01-01T00:00:00Z", None),
        (1_796_115_600, None),
    ],
)
def test_times_need_a_zone_and_become_milliseconds(text: object, moment_ms: int | None) -> None:
    """RFC 3339 with its zone is read, everything else refused."""
    if moment_ms is None:
        with pytest.raises(ValueError, match=r"time|year"):
            milliseconds(text)
    else:
        assert milliseconds(text) == moment_ms


@given(st.integers(946_684_800_000, 7_258_118_399_999))
def test_times_come_back_as_they_left(moment_ms: int) -> None:
    """Writing a moment and reading it again loses no millisecond."""
    assert milliseconds(time_text(moment_ms)) == moment_ms
