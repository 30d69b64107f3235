"""When episodes join or part, what moments are judged, and records that are empty or short."""

from __future__ import annotations

import pytest

from service.tripwires.counts import NOTHING, Counts
from service.tripwires.replaying import MOMENTS_MAX, WEEK_MS, Episode, Replay, replay
from service.tripwires.saying import Finding, Saw
from service.tripwires.setups import setups_of
from tests.tripwires.recorded import HOUR_MS, MINUTE_MS, USUAL, Minute, alone, facts

HALF_A_DAY = 720


def with_debts(*minutes: int) -> Minute:
    """Unfunded cost that stands for one minute each, so that a rule fires at that minute alone."""

    def minute(number: int) -> Counts:
        grown = int(number in minutes) - int(number - 1 in minutes)
        return USUAL._replace(unfunded=grown)

    return minute


def episodes(minutes: int, usual: Minute) -> list[tuple[int, int]]:
    """First and last minute of each episode of bare debt."""
    found = replay(facts(minutes, usual), alone("unfunded")).episodes["unfunded"]
    return [(one.first_ms // MINUTE_MS, one.last_ms // MINUTE_MS) for one in found]


@pytest.mark.parametrize(
    ("at", "wanted"),
    [
        ((100,), [(100, 100)]),
        ((100, 130), [(100, 130)]),
        ((100, 160), [(100, 160)]),
        ((100, 161), [(100, 100), (161, 161)]),
        ((100, 160, 220), [(100, 220)]),
        ((), []),
    ],
)
def test_what_fires_again_within_an_hour_is_one_episode(
    at: tuple[int, ...], wanted: list[tuple[int, int]]
) -> None:
    """An hour after its last moment is within; a minute more is another one."""
    assert episodes(HALF_A_DAY, with_debts(*at)) == wanted


def test_a_line_item_without_a_record_has_no_moments() -> None:
    """Nothing fires and nothing divides by nothing."""
    done = replay(facts(0), setups_of({}))
    assert (done.looks, done.from_ms, done.until_ms) == (0, -1, -1)
    assert all(found == [] for found in done.episodes.values())
    assert done.per_week("voids") == 0.0
    assert done.freezes == []


@pytest.mark.parametrize(
    ("minutes", "looks"), [(1, 1), (MOMENTS_MAX - 1, MOMENTS_MAX - 1), (MOMENTS_MAX, 750)]
)
def test_a_longer_record_is_judged_in_strides(minutes: int, looks: int) -> None:
    """Every minute below the bound, every second one from it on."""
    assert replay(facts(minutes), alone("unfunded")).looks == looks


def test_hours_before_the_first_minute_are_judged_by_hours() -> None:
    """Six hours whose minutes are gone, then six of minutes."""
    record = facts(HALF_A_DAY)
    record.minutes.starts = record.minutes.starts[360:]
    record.minutes.buckets = record.minutes.buckets[360:]
    done = replay(record, alone("unfunded"))
    assert done.looks == 6 + 360
    assert done.from_ms == HOUR_MS - 1


def test_rules_that_are_off_are_not_judged() -> None:
    """They have no episodes at all, not even none."""
    done = replay(facts(60), alone("unfunded", action="off"))
    assert (done.episodes, done.looks) == ({}, 60)


def test_a_replay_leaves_the_record_as_it_was() -> None:
    """Judging every moment moves nothing of what is known now."""
    record = facts(HALF_A_DAY, with_debts(100), unfunded=3)
    before = list(record.minutes.starts), list(record.minutes.buckets), record.unfunded
    first = replay(record, setups_of({}))
    assert replay(record, setups_of({})) == first
    assert (list(record.minutes.starts), list(record.minutes.buckets), record.unfunded) == before


def test_a_halt_is_reckoned_back_by_what_has_moved() -> None:
    """Halted from minute 300 to 310 and well since: known only from its two movements."""

    def minute(number: int) -> Counts:
        return USUAL._replace(halted={300: 1, 310: -1}.get(number, 0))

    record = facts(HALF_A_DAY, minute, halted=False)
    (found,) = replay(record, alone("learner_halted")).episodes["learner_halted"]
    assert (found.first_ms // MINUTE_MS, found.last_ms // MINUTE_MS) == (301, 309)


def test_an_episode_tells_what_was_seen_first() -> None:
    """Debt of one nano that grows to three is told as it began."""

    def minute(number: int) -> Counts:
        return USUAL._replace(unfunded=int(number in (100, 110, 120)))

    record = facts(HALF_A_DAY, minute, unfunded=3)
    (found,) = replay(record, alone("unfunded")).episodes["unfunded"]
    assert found.finding.saw.numbers == {"unfunded_nanos": 1}


def test_only_freezes_are_stops_and_they_stand_in_order() -> None:
    """Over all rules by their first moment; warnings stop nothing."""

    def one(rule: str, action: str, first_ms: int) -> Episode:
        return Episode(Finding(rule, action, Saw("", {}, 0)), first_ms, first_ms)

    several = {
        "a": [one("a", "freeze", 5), one("a", "freeze", 9)],
        "b": [one("b", "freeze", 7), one("b", "warn", 1)],
    }
    done = Replay(0, 10, 3, several)
    assert [(e.finding.rule, e.first_ms) for e in done.freezes] == [("a", 5), ("b", 7), ("a", 9)]


@pytest.mark.parametrize(
    ("length_ms", "count", "per_week"),
    [(WEEK_MS, 3, 3.0), (2 * WEEK_MS, 3, 1.5), (4 * WEEK_MS, 1, 0.25), (WEEK_MS, 0, 0.0)],
)
def test_how_often_a_week_is_by_the_length_of_the_record(
    length_ms: int, count: int, per_week: float
) -> None:
    """Episodes over weeks, however long each lasts."""
    found = [Episode(Finding("a", "warn", Saw("", {}, 0)), 0, 0)] * count
    assert Replay(7, 7 + length_ms, 1, {"a": found}).per_week("a") == per_week


def test_a_quiet_record_replays_quietly() -> None:
    """Two days of even traffic, and a record of nothing but silence."""
    assert all(not found for found in replay(facts(2880), setups_of({})).episodes.values())
    assert replay(facts(200, lambda _: NOTHING), setups_of({})).freezes == []
