"""Rules on what becomes of bids at their edges: least counts, shares, ratios and no past at all."""

from __future__ import annotations

import math

import pytest
from scipy import stats

from service.tripwires.counts import NOTHING, Counts
from service.tripwires.history import Facts
from service.tripwires.judging import judge
from service.tripwires.saying import Saw
from tests.tripwires.recorded import MINUTE_MS, USUAL, alone, facts

HOURS = 8 * 60
IN_AN_HOUR, IN_A_QUARTER = 61, 16
MUTE = Counts(bids=20)


def saw(known: Facts, rule: str, **said: object) -> Saw | None:
    """What one rule sees alone."""
    found = judge(known, alone(rule, **said))
    return found[0].saw if found else None


def spoilt(last: Counts, of_last: int = IN_AN_HOUR) -> Facts:
    """A usual record whose last minutes were others."""
    return facts(HOURS, last=lambda _: last, of_last=of_last)


def test_a_mute_quarter_is_told_with_the_bids_that_could_be_answered() -> None:
    """Sixteen minutes of 20 bids, of which those of the first eight are old enough: 160."""
    found = saw(spoilt(MUTE, IN_A_QUARTER), "no_outcomes")
    assert found == Saw(
        "160 bids, the newest 450 seconds old, and not one outcome in 15 minutes;"
        " usually 100 % of bids get one",
        {"bids": 160, "outcomes": 0, "usual_share": 1.0},
        (HOURS - IN_A_QUARTER) * MINUTE_MS,
    )


@pytest.mark.parametrize(("least", "fires"), [(160, True), (161, False)])
def test_so_many_bids_must_be_old_enough(least: int, fires: bool) -> None:
    """As many as the setting wants are enough."""
    known = spoilt(MUTE, IN_A_QUARTER)
    assert (saw(known, "no_outcomes", count_min=least) is not None) is fires


@pytest.mark.parametrize("one", [Counts(20, wins=1), Counts(20, losses=1), Counts(20, voids=1)])
def test_one_outcome_of_any_kind_shows_that_the_feed_lives(one: Counts) -> None:
    """Won, lost or void, in the newest minute."""
    last = lambda n: one if n == HOURS - 1 else MUTE  # noqa: E731
    assert saw(facts(HOURS, last=last, of_last=IN_A_QUARTER), "no_outcomes") is None


def test_values_alone_are_no_outcomes() -> None:
    """They come from another feed."""
    last = Counts(20, words=5, parked=2)
    assert saw(spoilt(last, IN_A_QUARTER), "no_outcomes") is not None


@pytest.mark.parametrize(("each_minute", "fires"), [(31, False), (32, True)])
def test_without_a_past_five_times_as_many_are_wanted(each_minute: int, fires: bool) -> None:
    """Five times 50; of sixteen minutes those of the first eight count."""
    found = saw(facts(16, lambda _: Counts(each_minute)), "no_outcomes")
    assert (found is not None) is fires
    assert found is None or found.sentence.endswith("; none ever came")


def test_silence_must_be_unlikely_on_its_own_history() -> None:
    """One bid in fifty is answered: 0.98 to the power of 160 is 0.039."""
    usual = Counts(bids=50, losses=1)
    last = lambda _: MUTE  # noqa: E731
    known = facts(HOURS, lambda _: usual, last, IN_A_QUARTER)
    tail = 0.98**160
    assert saw(known, "no_outcomes", alpha=0.99 * tail) is None
    assert saw(known, "no_outcomes", alpha=1.01 * tail) is not None


@pytest.mark.parametrize(
    ("wins", "share"), [(20, "100 %"), (19, None), (6, None), (5, "25 %"), (0, "0 %")]
)
def test_a_win_rate_is_far_from_twice_or_half_on(wins: int, share: str | None) -> None:
    """Half is usual: all of them are twice as many, a quarter is half."""
    found = saw(spoilt(USUAL._replace(wins=wins, losses=20 - wins, voids=0)), "win_rate")
    assert (found.sentence.split(" of ")[0] if found else None) == share


def test_a_win_rate_says_share_past_and_chance() -> None:
    """A quarter of 61 minutes of 20 outcomes, by an exact binomial tail at the lower limit."""
    found = saw(spoilt(USUAL._replace(wins=5, losses=15, voids=0)), "win_rate")
    assert found is not None
    assert found.sentence.startswith("25 % of 1220 outcomes were won in 60 minutes; usually 50 %")
    assert found.numbers == {"count": 305, "of": 1220, "share": 0.25, "usual_share": 0.5}


def test_an_unlikely_share_within_the_ratio_wakes_nobody() -> None:
    """Nineteen of twenty all hour long is unlikely beyond all words, but not twice the usual."""
    assert stats.binom(1220, 0.5).sf(1158) < 1e-200
    assert saw(spoilt(USUAL._replace(wins=19, losses=1, voids=0)), "win_rate") is None


@pytest.mark.parametrize(("outcomes", "fires"), [(12, False), (11, True)])
def test_silent_bids_must_be_a_fifth(outcomes: int, fires: bool) -> None:
    """Of 900 bids that are old enough, 732 outcomes leave 18.7 % silent, 671 leave 25.4 %."""
    found = saw(spoilt(USUAL._replace(wins=outcomes, losses=0, voids=0)), "silent_bids")
    assert (found is not None) is fires
    assert found is None or found.numbers == {
        "count": 900 - 61 * 11, "of": 900, "share": round(229 / 900, 6), "usual_share": 0.0
    }  # fmt: skip


def test_more_outcomes_than_bids_are_no_silence() -> None:
    """Outcomes of earlier bids come when they come."""
    assert saw(spoilt(USUAL._replace(wins=60)), "silent_bids") is None


@pytest.mark.parametrize(
    ("rule", "last", "fires"),
    [
        ("voids", USUAL._replace(voids=2, losses=8), True),
        ("voids", USUAL._replace(voids=1, losses=9), False),
        ("late_outcomes", USUAL._replace(late=1), True),
        ("late_outcomes", USUAL, False),
        ("refused_outcomes", USUAL._replace(refused=2), True),
        ("refused_outcomes", USUAL._replace(refused=1), False),
    ],
)
def test_a_share_that_has_grown_meets_its_least(rule: str, last: Counts, fires: bool) -> None:
    """A tenth void, a twentieth late; two in 32 reports refused are 6 %, one in 31 is 3 %."""
    assert (saw(spoilt(last), rule) is not None) is fires


def test_refusals_need_no_past_to_be_wrong() -> None:
    """From the first hour on: nobody should be refused anything."""
    found = saw(facts(20, lambda _: Counts(refused=1, wins=1)), "refused_outcomes")
    assert found is not None
    assert found.sentence == "50 % of 40 reports were refused in 60 minutes; no earlier ones"
    assert saw(facts(20, lambda _: USUAL._replace(voids=9)), "voids") is None


@pytest.mark.parametrize(("refused", "fires"), [(19, False), (20, True)])
def test_a_handful_of_refusals_is_a_try(refused: int, fires: bool) -> None:
    """Twenty in an hour, not nineteen, whatever share they are."""
    last = lambda n: Counts(refused=refused) if n == HOURS - 1 else NOTHING  # noqa: E731
    known = facts(HOURS, last=last, of_last=IN_AN_HOUR)
    assert (saw(known, "refused_outcomes") is not None) is fires


def test_a_share_that_was_always_so_is_left_alone() -> None:
    """Four in ten void is bad, but it is no news."""
    always = USUAL._replace(voids=8, losses=2)
    assert saw(facts(HOURS, lambda _: always), "voids") is None


def test_a_more_varied_past_makes_a_rule_less_sure() -> None:
    """The same mean, hours apart: the tail grows with the spread, and the alarm is gone."""
    steady = USUAL._replace(voids=2, losses=8)

    def varied(minute: int) -> Counts:
        voids = 0 if minute // 60 % 2 else 4
        return USUAL._replace(voids=voids, losses=10 - voids)

    last = USUAL._replace(voids=5, losses=5)
    said = [
        saw(facts(HOURS, usual, lambda _: last, IN_AN_HOUR), "voids")
        for usual in (lambda _: steady, varied)
    ]
    assert said[0] is not None
    assert said[1] is None
    assert math.isclose(said[0].numbers["usual_share"], 0.1)
