"""A candidate setting on recorded history fires when it would have fired, and changes nothing."""

from __future__ import annotations

import time

import pytest

from service.tripwires.replaying import MOMENTS_MAX, replay
from service.tripwires.setups import setups_of
from tests.tripwires.recorded import MINUTE_MS, USUAL, alone, facts
from tests.tripwires.test_rules import BAD

TEN_HOURS = 600


def test_a_bad_stretch_is_one_episode_that_freezes() -> None:
    """From within minutes of its start to an hour after its end, and once for all its minutes."""

    def minute(number: int) -> object:
        return BAD["value_size"] if 500 <= number < 530 else USUAL

    done = replay(facts(TEN_HOURS, usual=minute), alone("value_size"))  # type: ignore[arg-type]
    (episode,) = done.episodes["value_size"]
    assert 500 <= episode.first_ms // MINUTE_MS <= 505
    assert 530 <= episode.last_ms // MINUTE_MS <= 590
    assert [one.finding.rule for one in done.freezes] == ["value_size"]
    assert done.per_week("value_size") == pytest.approx(7 * 24 * 60 / TEN_HOURS, rel=0.01)
    assert replay(facts(TEN_HOURS), alone("value_size")).freezes == []


def test_what_was_unfunded_then_is_reckoned_back() -> None:
    """Gauges are known now, and at each moment less what has moved since."""

    def minute(number: int) -> object:
        return USUAL._replace(unfunded=5 if number == 300 else -5 if number == 400 else 0)

    record = facts(TEN_HOURS, usual=minute)  # type: ignore[arg-type]
    (episode,) = replay(record, alone("unfunded")).episodes["unfunded"]
    assert (episode.first_ms // MINUTE_MS, episode.last_ms // MINUTE_MS) == (300, 399)
    assert replay(record, alone("unfunded", action="off")).episodes == {}


def test_days_of_minutes_are_judged_in_seconds() -> None:
    """At most so many moments, whatever is kept; a month by hours before them."""
    record = facts(3 * 24 * 60)
    started = time.process_time()
    done = replay(record, setups_of({}))
    assert done.looks <= MOMENTS_MAX
    assert time.process_time() - started < 10
    assert done.freezes == []


def test_hours_stand_in_for_minutes_that_are_gone() -> None:
    """A fault of an hour ten hours ago is found by hours alone."""

    def minute(number: int) -> object:
        return BAD["voids"] if 420 <= number < 480 else USUAL

    record = facts(TEN_HOURS, usual=minute)  # type: ignore[arg-type]
    record.minutes.starts, record.minutes.buckets = [], []
    (episode,) = replay(record, alone("voids")).episodes["voids"]
    assert episode.first_ms // MINUTE_MS == 479
