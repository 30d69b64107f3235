"""What the rules are given of a long record: less of it than is kept, and never another verdict."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest

from service.store import tripwires
from service.store.database import Database
from service.tripwires.counts import NOTHING, Counts, plus
from service.tripwires.history import past
from service.tripwires.judging import judge
from service.tripwires.saying import Finding, Saw
from service.tripwires.setups import DEFAULTS, Setup, setups_of
from service.tripwiring import Widths, armed, facts_of, recorded, told
from tests.builders import NAME, begin, line_item

MINUTE_MS = 60_000
WIDTHS = Widths(MINUTE_MS)
DAYS_KEPT = 40
MINUTES_KEPT = 2 * 1440
pytestmark = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)


@pytest.fixture(name="database")
def _database(migrated_url: str) -> Iterator[Database]:
    database = Database(migrated_url)
    begin(database)
    yield database
    database.close()


def fill(database: Database, hours: int, seed: int) -> int:
    """Uneven hours, the newest two days by minutes too; returns the moment of the end."""
    generator = np.random.default_rng(seed)
    draw = generator.poisson(2.0, (60 * hours, 6)).tolist()
    sums = dict[tuple[int, int], Counts]()
    for minute, (wins, losses, voids, late, words, refused) in enumerate(draw):
        counts = Counts(
            wins + losses + voids, wins, losses, voids, late, 1000 * wins, 1000 * wins, words,
            words // 2, logs=20_000 * (words - words // 2),
            log_squares=20_000**2 * (words - words // 2), refused=refused // 4,
        )  # fmt: skip
        for width in (tripwires.MINUTES, tripwires.HOURS, tripwires.DAYS):
            if width == tripwires.MINUTES and minute < len(draw) - MINUTES_KEPT:
                continue
            span = WIDTHS.of(width)
            key = width, minute * MINUTE_MS // span * span
            sums[key] = plus(sums.get(key, NOTHING), counts)
    of = tripwires.Standing(NAME, 1, 0, (0, 0, 0), (0, 0, 0))
    database.write(lambda c: tripwires.advance(c, of, 1, 0, sums))
    return 60 * hours * MINUTE_MS - 1


def both(database: Database, now: int, setups: dict[str, Setup]) -> tuple[Any, Any]:
    """What is read for a look, and all that is kept."""
    known = (line_item(), WIDTHS, now, (0, 0, 0))
    looked = database.read(lambda c: facts_of(c, *known, setups))
    return looked, database.read(lambda c: recorded(c, *known))


@pytest.mark.parametrize("hours", [1, 5, 7, 30, 24 * 8 + 5, 24 * DAYS_KEPT])
def test_a_look_judges_as_if_it_had_read_everything(database: Database, hours: int) -> None:
    """From the first hour to weeks: windows, pasts and findings are the same."""
    now = fill(database, hours, seed=hours)
    lenient = {
        name: Setup("warn", one.window_ms, 1, one.ratio and 1.01, one.alpha and 0.9)
        for name, one in DEFAULTS.items()
    }
    looked, everything = both(database, now, lenient)
    for setup in lenient.values():
        window_ms = setup.window_ms or 0
        assert looked.window(window_ms) == everything.window(window_ms)
        assert past(looked, window_ms) == past(everything, window_ms)
    assert judge(looked, lenient) == judge(everything, lenient)


def test_a_look_reads_little_of_a_long_record(database: Database) -> None:
    """Hours of forty days are hundreds; a look takes the same hours of each and the newest."""
    now = fill(database, 24 * DAYS_KEPT, seed=1)
    looked, everything = both(database, now, armed(setups_of({})))
    assert len(everything.hours.starts) == 24 * DAYS_KEPT
    assert len(looked.hours.starts) < 24 * DAYS_KEPT / 4
    assert len(looked.minutes.starts) < 200 < len(everything.minutes.starts)


def test_a_longer_window_reads_further_back(database: Database) -> None:
    """As far as the setting needs it, and rules that are off need nothing."""
    now = fill(database, 48, seed=2)
    one = {"voids": Setup("warn", 5 * 3_600_000, 1, 1.5, 0.1)}
    wide, _ = both(database, now, one)
    narrow, _ = both(database, now, {})
    assert wide.minutes.starts[0] < narrow.minutes.starts[0]
    assert set(armed(setups_of({"tripwires": {"voids": {"action": "off"}}}))) == (
        set(DEFAULTS) - {"voids"}
    )


@pytest.mark.parametrize(
    ("width", "wide_ms"),
    [(tripwires.MINUTES, 1000), (tripwires.HOURS, 60_000), (tripwires.DAYS, 1_440_000)],
)
def test_widths_of_a_drill_shrink_together(backend: str, width: int, wide_ms: int) -> None:
    """Sixty to an hour and twenty-four to a day, however short the minute."""
    assert backend == "sqlite"
    assert Widths(1000).of(width) == wide_ms
    assert Widths().of(width) == 60 * wide_ms


def test_a_finding_is_told_without_its_window(backend: str) -> None:
    """Rule, action, sentence, numbers and since when; a copy, so that nobody changes ours."""
    assert backend == "sqlite"
    numbers = {"count": 3}
    said = told(Finding("voids", "warn", Saw("much", numbers, 7), 60_000))
    assert said == {
        "rule": "voids", "action": "warn", "saw": "much", "numbers": {"count": 3}, "since_ms": 7
    }  # fmt: skip
    assert said["numbers"] is not numbers
